"""The page: the same words as the PDF, escaped, for a reader, a phone and a printer."""

import re
from html.parser import HTMLParser

import pytest

from labplan.procedures.sheet.html import sheet_html
from tests.sheets import lactoside, octyl, refused, short, view

HOSTILE = '<script>alert("x")</script> {{ 7 }} {% now %} &amp; \'">'
_VOID = {"meta", "img", "br", "path", "circle", "ellipse", "use"}


class Page(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))
        if tag not in _VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag not in _VOID:
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] not in ("style", "title"):
            self.text += data


def page_of(html: str) -> Page:
    page = Page()
    page.feed(html)
    page.close()
    assert page.open == []
    return page


def flat(text: str) -> str:
    return re.sub(r"\s+", "", text)


@pytest.mark.parametrize("stored", [lactoside, octyl, refused, short])
def test_the_page_is_closed_named_and_alone(stored) -> None:  # type: ignore[no-untyped-def]
    html = sheet_html(view(stored()))
    page = page_of(html)
    assert html.startswith('<!doctype html>\n<html lang="en">')
    assert "<title>P-7K2M4Q9X: " in html
    assert re.findall(r"https?://", html) == []
    addresses = [attrs.get(name) or "" for _, attrs in page.seen for name in ("src", "href")]
    outside = [a for a in addresses if a and not a.startswith(("data:image/svg", "#"))]
    assert outside == []
    assert not any(tag in ("script", "link", "iframe") for tag, _ in page.seen)


def test_pictures_and_tables_can_be_read_without_seeing() -> None:
    page = page_of(sheet_html(view(lactoside())))
    images = [attrs for tag, attrs in page.seen if tag == "img"]
    assert len(images) == 4
    assert all((attrs["alt"] or "").startswith("Structure of the ") for attrs in images)
    drawn = [attrs for tag, attrs in page.seen if tag == "svg" and attrs.get("role") == "img"]
    assert len(drawn) > 9
    assert all(re.fullmatch(r"GHS0\d: [a-z ]+", attrs["aria-label"] or "") for attrs in drawn)
    used = {attrs["href"] for tag, attrs in page.seen if tag == "use"}
    defined = {f"#{attrs['id']}" for tag, attrs in page.seen if tag == "symbol"}
    assert used == defined
    assert all(attrs.get("scope") == "col" for tag, attrs in page.seen if tag == "th")


def test_a_users_text_is_escaped() -> None:
    html = sheet_html(view(octyl(), project_title=HOSTILE, requested_by_name=HOSTILE))
    assert "<script" not in html
    assert page_of(html).text.count(HOSTILE) == 2


def test_every_amount_and_bottle_is_on_the_page() -> None:
    source = lactoside()
    text = flat(page_of(sheet_html(view(source))).text)
    for stage in source["route"]["stages"]:
        for charge in stage["charges"]:
            assert text.count(flat(charge["amount_text"])) >= 2
            assert not charge["bottle"] or charge["bottle"] in text
        for step in stage["steps"]:
            assert flat(step["title"]) in text
    for hazard in source["hazards"]:
        assert all(s["code"] in text for s in hazard["hazard_statements"])
    assert "Hazardsnotestablished:handleashazardous" in text


def test_subscripts_and_charges_are_marked_up() -> None:
    html = sheet_html(view(octyl()))
    assert "C<sub>22</sub>H<sub>36</sub>O<sub>10</sub>" in html
    assert "[M+NH<sub>4</sub>]<sup>+</sup>" in html
    assert "BF<sub>3</sub> etherate" in html
    assert "-<i>O</i>-acetyl-β-<small>D</small>-glucopyranoside" in html
