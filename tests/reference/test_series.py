"""The series for concentric shells against numbers and formulas from elsewhere."""

import numpy as np
import pytest

from synthetic_heads.series import shell_factors, sphere_lead_field

ANGLES = np.radians([0.0, 30.0, 45.0, 90.0, 180.0])
# Worked numbers of the published formula (de Munck & Peters 1993 IEEE TBME 40:1166; Mosher, Leahy
# & Lewis 1999 IEEE TBME 46:245), computed with another implementation whose shell factors agree
# with a degree-by-degree solution of the boundary-value problem to 2e-15. No printed numbers are
# known. Electrodes at ANGLES from the dipole's axis z towards +x; "tan" is a dipole along +x.
A = ((0.87, 0.92, 1.0), (1.0, 1 / 80, 1.0))
B = ((80.0, 86.0, 92.0), (0.33, 0.0042, 0.33))
B2 = ((80.0, 86.0, 92.0), (0.33, 0.0132, 0.33))
C = ((78.0, 80.0, 86.0, 92.0), (0.33, 1.79, 0.0132, 0.43))
HOMOGENEOUS = ((1.0,), (1.0,))
# In the unitless rows lengths, moments and conductivities are 1: our uV, nAm and mm then carry a
# factor of 1000.
WORKED = [
    (HOMOGENEOUS, 0.5, 1e-3, "rad", (0.795775, 0.342526, 0.139253, -0.0737434, -0.123787)),
    (HOMOGENEOUS, 0.5, 1e-3, "tan", (0, 0.422096, 0.37723, 0.185058, 0)),
    (A, 0.2, 1e-3, "rad", (0.1977, 0.158804, 0.118007, -0.0157455, -0.1306)),
    (A, 0.2, 1e-3, "tan", (0, 0.104928, 0.139194, 0.154798, 0)),
    (A, 0.5, 1e-3, "rad", (0.312518, 0.195208, 0.114403, -0.0346992, -0.102963)),
    (A, 0.5, 1e-3, "tan", (0, 0.172859, 0.191334, 0.141362, 0)),
    (A, 0.7, 1e-3, "rad", (0.507721, 0.207226, 0.0970382, -0.0429488, -0.0898232)),
    (A, 0.7, 1e-3, "tan", (0, 0.244983, 0.225175, 0.129349, 0)),
    (A, 0.8, 1e-3, "rad", (0.753346, 0.202336, 0.0840488, -0.0458335, -0.0843293)),
    (A, 0.8, 1e-3, "tan", (0, 0.285829, 0.238309, 0.123107, 0)),
    (B, 40.0, 10.0, "rad", (0.99586, 0.675029, 0.422635, -0.111606, -0.39066)),
    (B, 40.0, 10.0, "tan", (0, 0.552246, 0.643996, 0.522951, 0)),
    (B, 70.0, 10.0, "rad", (2.24935, 0.738533, 0.3244, -0.160346, -0.313109)),
    (B, 70.0, 10.0, "tan", (0, 0.963175, 0.837412, 0.45402, 0)),
    (B2, 70.0, 10.0, "rad", (4.70047, 1.06027, 0.328274, -0.264897, -0.365439)),
    (B2, 70.0, 10.0, "tan", (0, 1.79179, 1.35204, 0.558147, 0)),
    (C, 70.0, 10.0, "rad", (2.74795, 0.837806, 0.317675, -0.193702, -0.306629)),
    (C, 70.0, 10.0, "tan", (0, 1.19292, 0.985533, 0.462601, 0)),
]


@pytest.mark.parametrize(("model", "height", "moment", "direction", "expected"), WORKED)
def test_potentials_agree_with_the_worked_numbers(model, height, moment, direction, expected):
    radii, sigma = model
    electrodes = radii[-1] * np.stack([np.sin(ANGLES), 0 * ANGLES, np.cos(ANGLES)], axis=1)
    lead = sphere_lead_field(
        electrodes, [[0, 0, height]], radii_mm=radii, conductivity_s_per_m=sigma
    )
    got = moment * lead[:, 0, 2 if direction == "rad" else 0]
    # The worked numbers are printed to six figures: half of the last one is at most 5e-6.
    assert got == pytest.approx(expected, rel=5.01e-6, abs=1e-9)


@pytest.mark.parametrize(
    ("model", "expected"),
    [
        (A, (0.660919, 0.406378, 0.275272, 0.203410, 0.160428)),
        (B, (0.665274, 0.405163, 0.272937, 0.201076, 0.158333)),
        (C, (0.935282, 0.658268, 0.471407, 0.352292, 0.274979)),
    ],
)
def test_shell_factors_agree_with_the_worked_numbers(model, expected):
    assert shell_factors(*model, 5) == pytest.approx(expected, abs=6e-7)


def test_a_homogeneous_sphere_agrees_with_the_closed_form():
    # Brody et al. 1973, as written by Mosher, Leahy & Lewis 1999 IEEE TBME 46:245.
    rng = np.random.default_rng(5)
    radius, sigma = 92.0, 0.33
    electrodes = rng.normal(size=(20, 3))
    electrodes *= radius / np.linalg.norm(electrodes, axis=1, keepdims=True)
    source, moment = np.array([30.0, -45.0, 50.0]), np.array([1.0, -2.0, 0.5])
    away = electrodes - source
    d = np.linalg.norm(away, axis=1)
    f = d * (radius * d + radius**2 - electrodes @ source)
    squared = source @ source
    c1 = (2 * (away @ source) / d**3 + 1 / d - 1 / radius) / (4 * np.pi * sigma * squared)
    c2 = (2 / d**3 + (d + radius) / (radius * f)) / (4 * np.pi * sigma * squared)
    expected = (c1 - c2 * (electrodes @ source)) * (source @ moment)
    expected += c2 * squared * (electrodes @ moment)
    lead = sphere_lead_field(electrodes, [source], radii_mm=[radius], conductivity_s_per_m=[sigma])
    assert lead[:, 0] @ moment == pytest.approx(1000 * expected, rel=1e-10)


def test_equal_shells_are_one_sphere():
    rng = np.random.default_rng(1)
    electrodes, sources = rng.normal(size=(9, 3)), rng.normal(size=(6, 3)) * 25
    one = sphere_lead_field(electrodes, sources, radii_mm=[92], conductivity_s_per_m=[0.4])
    three = sphere_lead_field(
        electrodes, sources, radii_mm=[80, 86, 92], conductivity_s_per_m=[0.4, 0.4, 0.4]
    )
    assert three == pytest.approx(one, rel=1e-11, abs=1e-12)


def test_potentials_move_with_the_sphere_and_average_to_zero_over_it():
    rng = np.random.default_rng(2)
    electrodes = rng.normal(size=(12, 3)) * 50
    sources = rng.normal(size=(5, 3)) * 20
    rotation = np.linalg.qr(rng.normal(size=(3, 3)))[0]
    shift = np.array([4.0, -20.0, 33.0])
    here = sphere_lead_field(electrodes, sources)
    there = sphere_lead_field(
        electrodes @ rotation.T + shift, sources @ rotation.T + shift, center_mm=shift
    )
    assert there @ rotation == pytest.approx(here, rel=1e-10, abs=1e-12)

    nodes, weights = np.polynomial.legendre.leggauss(80)
    turn = np.linspace(0, 2 * np.pi, 160, endpoint=False)
    ring = np.sqrt(1 - nodes[:, None] ** 2)
    grid = np.stack(
        [ring * np.cos(turn), ring * np.sin(turn), np.broadcast_to(nodes[:, None], (80, 160))], -1
    )
    lead = sphere_lead_field(grid.reshape(-1, 3), sources).reshape(80, 160, 5, 3).mean(1)
    assert np.abs(np.tensordot(weights, lead, 1)).max() < 1e-10 * np.abs(lead).max()


def test_a_dipole_at_the_centre_and_one_beside_it_agree():
    rng = np.random.default_rng(3)
    electrodes = rng.normal(size=(10, 3))
    lead = sphere_lead_field(electrodes, [[0, 0, 0], [1e-7, 1e-7, -1e-7]])
    assert lead[:, 0] == pytest.approx(lead[:, 1], abs=1e-8)


def test_a_dipole_in_the_skull_is_refused():
    with pytest.raises(ValueError, match=r"Dipole 1 is 81\.00 mm"):
        sphere_lead_field([[0, 0, 92]], [[0, 0, 10], [0, 81, 0]])
