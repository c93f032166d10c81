"""The tape-measure rules of the phantoms against the published 10-05 places on a real head."""

from __future__ import annotations

import mne
import numpy as np
import pytest

from synthetic_heads.meshes import Skin
from synthetic_heads.tape import NAMES_19, NAMES_61, all_places

# World of the head's file minus the frame of the published table: both show the same 1 mm grid of
# 181 x 217 x 181 voxels, the file with its first voxel at (-90, -125, -71) mm, the table's
# usual frame with it at (-90, -126, -72) mm.
FILE_FROM_TABLE_MM = np.array([0.0, 1.0, 1.0])


@pytest.fixture(scope="module")
def averaged_head():
    """Places by the rules, and the published ones put on the same skin."""
    from tests.painted import real_head

    head = real_head("ch2")
    skin = Skin(head.vertices_mm, head.faces)
    # The published table: mne's builtin montage colin27_1005, 10-05 places on this very head
    # (after Oostenveld R & Praamstra P 2001, Clin Neurophysiol 112:713).
    table = mne.channels.make_standard_montage("colin27_1005").get_positions()["ch_pos"]
    raw = {name: 1000.0 * place + FILE_FROM_TABLE_MM for name, place in table.items()}
    published = dict(zip(raw, skin.closest(np.array(list(raw.values()))), strict=True))
    places = all_places(head.vertices_mm, head.faces, head.landmarks_mm)
    return places, published, raw


@pytest.mark.real_head
def test_published_places_lie_on_the_skin_we_found(averaged_head):
    # The table was made on another scalp of the same head: they agree to about 1 mm.
    _, published, raw = averaged_head
    apart = np.linalg.norm([published[n] - raw[n] for n in NAMES_61], axis=1)
    assert apart.mean() < 2.0


@pytest.mark.real_head
def test_places_by_tape_agree_with_the_published_ones(averaged_head):
    # Two sources of difference, both in the definitions: the landmarks (ours read off by eye; the
    # preauricular point alone moves lateral places by up to 10 mm between definitions) and
    # whether T7 halves the horizontal tape or stands at 10 % of the coronal one (here 6-8 mm
    # at T7 and T8). Neighbours in the 10-10 system stand 32 mm apart on this head.
    places, published, _ = averaged_head
    error = {n: np.linalg.norm(places[n] - published[n]) for n in NAMES_61}
    assert np.mean(list(error.values())) < 5.0
    assert max(error.values()) < 11.0
    midline = [n for n in NAMES_61 if n.endswith("z")]
    # no definition is in doubt along the midline
    assert max(error[n] for n in midline) < 4.5
    assert np.mean([error[n] for n in NAMES_19]) < 5.0


@pytest.mark.real_head
def test_every_place_is_nearest_to_its_own_published_place(averaged_head):
    places, published, _ = averaged_head
    for name in NAMES_61:
        nearest = min(NAMES_61, key=lambda o: np.linalg.norm(published[o] - places[name]))
        assert nearest == name


@pytest.mark.real_head
def test_half_steps_have_the_published_order(averaged_head):
    # "F3h" lies between F3 and F1, "F1h" between F1 and Fz, and so on: the table decides.
    places, published, _ = averaged_head
    names = [n for n in published if n in places and n.endswith("h") and n[0] in "FCP"]
    assert len(names) > 60
    error = [np.linalg.norm(places[n] - published[n]) for n in names]
    # half a 10-05 step between h-places is about 8 mm: a swapped order would show as 16
    assert np.mean(error) < 6.5


def test_the_published_table_has_every_name_the_rules_make():
    table = mne.channels.make_standard_montage("colin27_1005").ch_names
    from synthetic_heads.meshes import icosphere

    sphere, faces = icosphere(4)
    marks = {"NAS": (0, 90, -5), "INI": (0, -90, -5), "LPA": (-90, 0, -9), "RPA": (90, 0, -9)}
    made = all_places(92 * sphere, faces, marks)
    assert set(table) <= set(made)
    assert set(made) - set(table) == {"Nz", "LPA", "RPA"}
