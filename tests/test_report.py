"""What the page says, and what it must never say."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import pytest

from locator.report.page import make_report
from tests.small_results import small_run


class _Page(HTMLParser):
    """Collects tags and text, and complains about tags that are not closed in order."""

    void = frozenset({"meta", "img", "br", "link", "input", "hr"})

    def __init__(self, text: str) -> None:
        super().__init__()
        self.stack: list[str] = []
        self.images: list[dict[str, str | None]] = []
        self.ids: list[str] = []
        self.addresses: list[str] = []
        self.words: list[str] = []
        self.source = text
        self.feed(text)
        assert not self.stack

    def handle_starttag(self, tag, attrs):
        attributes = dict(attrs)
        if tag not in self.void:
            self.stack.append(tag)
        if tag == "img":
            self.images.append(attributes)
        if "id" in attributes:
            self.ids.append(attributes["id"])
        self.addresses += [attributes[k] for k in ("src", "href", "srcset") if k in attributes]

    def handle_endtag(self, tag):
        assert self.stack.pop() == tag

    def handle_data(self, data):
        if not {"style", "script"} & set(self.stack):
            self.words.append(data)

    @property
    def text(self) -> str:
        return re.sub(r"\s+", " ", " ".join(self.words))


@pytest.fixture(scope="module")
def found_page() -> _Page:
    return _Page(make_report(small_run()))


def test_page_needs_no_other_file(found_page):
    assert found_page.images
    outside = [a for a in found_page.addresses if not a.startswith(("data:image/png;base64,", "#"))]
    assert outside == []


def test_every_picture_has_words(found_page):
    assert all((image.get("alt") or "").strip() for image in found_page.images)


def test_ids_are_unique_and_links_lead_somewhere(found_page):
    assert len(found_page.ids) == len(set(found_page.ids))
    targets = {a[1:] for a in found_page.addresses if a.startswith("#")}
    assert targets <= set(found_page.ids)


def test_what_needs_an_eye_comes_first(found_page):
    text = found_page.text
    order = ["Two names fit.", "The response at 100 ms", "One row per name", "Sides rest on"]
    places = [text.index(words) for words in order]
    assert places == sorted(places)


def test_surviving_response_is_said_with_its_doubt(found_page):
    text = found_page.text
    assert "The response at 100 ms survives correction" in text
    assert "its place is known to ± 12 mm" in text
    assert "corrected for all places and times" in text
    assert "not everywhere that is coloured" in text
    assert "2 of 50 pseudo-runs" in text


def test_names_from_files_are_escaped(found_page):
    assert "C5 is nearly as likely <b>" in found_page.text


def test_nothing_survives_is_said_plainly_and_no_map_is_shown():
    page = _Page(make_report(small_run(p=0.2)))
    assert "Nothing survives correction" in page.text
    assert "No map is shown" in page.text
    assert not any("in colour" in (image.get("alt") or "") for image in page.images)
    assert "survives correction for multiple comparisons" not in page.text


def test_average_without_trials_says_that_nothing_was_tested():
    page = _Page(make_report(small_run(trials=1)))
    assert "nothing could be tested" in page.text
    assert not any("in colour" in (image.get("alt") or "") for image in page.images)


def test_unfinished_page_says_that_it_is_stale():
    text = _Page(make_report(small_run(complete=False))).text
    assert "Not finished" in text
    assert "stale" in text


def test_same_results_give_the_same_page(found_page):
    assert make_report(small_run()) == found_page.source


def test_cautions_stand_on_the_page(found_page):
    assert "not a medical device" in found_page.text
    assert "EEG hardware in a scanner can heat and burn" in found_page.text
