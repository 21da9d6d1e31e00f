"""Pages, filters and figures of the lists."""

import base64
import csv
import re
from pathlib import Path
from typing import Any
from urllib.parse import quote

import pytest

from inventory.models import Bottle
from labplan.procedures.demo.scenario import FOLDER
from tests.api.problems import assert_problem, error_codes
from tests.laboratory import PROCEDURES, ApiTestClient, Laboratory, octyl_order

BOTTLES = "/api/v1/bottles/"
ALL_LISTS = [
    BOTTLES, "/api/v1/substances/", "/api/v1/places/", "/api/v1/projects/",
    "/api/v1/reservations/", PROCEDURES, "/api/v1/bottles/GPA-1/movements/",
]  # fmt: skip
PLAIN_DECIMAL = re.compile(r"-?(0|[1-9][0-9]*)(\.[0-9]*[1-9])?")


def csv_column(name: str, file: str = "stock.csv") -> list[str]:
    with Path(FOLDER / file).open(newline="") as lines:
        return [row[name] for row in csv.DictReader(lines)]


def walk(client: ApiTestClient, path: str, link: str = "next") -> list[list[dict[str, Any]]]:
    """Follow a list to its end; at most 100 pages."""
    pages, following = [], path
    for _ in range(100):
        page = client.get(following).json()
        pages.append(page["results"])
        following = page[link]
        if following is None:
            return pages
    raise AssertionError(f"{path} never ends")


def codes(pages: list[list[dict[str, Any]]]) -> list[str]:
    return [row["code"] for page in pages for row in page]


@pytest.mark.parametrize("size", [1, 7, 65, 66, 67, 200])
def test_the_pages_show_every_bottle_exactly_once(size: int, lab: Laboratory) -> None:
    pages = walk(lab.client(), f"{BOTTLES}?page_size={size}")
    assert codes(pages) == sorted(csv_column("code"))
    assert [len(page) for page in pages[:-1]] == [size] * (len(pages) - 1)
    assert len(pages) == -(-66 // size)


def test_the_way_back_shows_the_same_pages(lab: Laboratory) -> None:
    client = lab.client()
    there = walk(client, f"{BOTTLES}?page_size=20")
    last = client.get(f"{BOTTLES}?page_size=20").json()
    while last["next"]:
        last = client.get(last["next"]).json()
    back = [last["results"], *walk(client, last["previous"], "previous")]
    assert sorted(codes(back)) == codes(there)


def test_a_bottle_that_comes_in_meanwhile_moves_no_other_off_the_pages(lab: Laboratory) -> None:
    client = lab.client()
    first = client.get(f"{BOTTLES}?page_size=40").json()
    bottle = Bottle.objects.get(code="GPA-1")
    balance = bottle.balance
    bottle.pk, bottle.code = None, "AAA-1"
    bottle.save()
    balance.pk, balance.bottle, balance.on_hand, balance.seq = bottle.pk, bottle, 0, 0
    balance._state.adding = True
    balance.save()
    seen = codes([first["results"]]) + codes(walk(client, first["next"]))
    assert seen == sorted(csv_column("code"))


def test_a_code_that_is_not_ascii_is_walked_past(lab: Laboratory) -> None:
    Bottle.objects.filter(code="GPA-1").update(code="GÄÖ & 1")
    pages = walk(lab.client(), f"{BOTTLES}?page_size=1")
    assert len(set(codes(pages))) == 66
    shown = lab.client().get(f"{BOTTLES}{quote('GÄÖ & 1')}/")
    assert shown.json()["code"] == "GÄÖ & 1"


@pytest.mark.parametrize("path", ALL_LISTS)
def test_every_list_has_the_same_form(path: str, lab: Laboratory) -> None:
    body = lab.client().get(path).json()
    assert list(body) == ["next", "previous", "results"]
    assert body["previous"] is None


def test_a_page_holds_fifty_unless_asked_and_two_hundred_at_most(lab: Laboratory) -> None:
    client = lab.client()
    assert len(client.get(BOTTLES).json()["results"]) == 50
    template = Bottle.objects.select_related("balance").get(code="CGG-1")
    for number in range(200):
        template.balance.pk = template.pk = None
        template.code = f"NEW-{number:03}"
        template._state.adding = template.balance._state.adding = True
        template.save()
        template.balance.bottle, template.balance.on_hand, template.balance.seq = template, 0, 0
        template.balance.save()
    assert len(client.get(BOTTLES + "?page_size=200").json()["results"]) == 200
    assert len(client.get(BOTTLES + "?page_size=201").json()["results"]) == 200
    assert len(codes(walk(client, BOTTLES + "?page_size=999999"))) == 266


@pytest.mark.parametrize("size", ["0", "-1", "1.5", "ten", "", "1e2", "９", "9" * 30, " 5"])
@pytest.mark.parametrize("path", [BOTTLES, PROCEDURES])
def test_a_page_size_that_is_no_number_of_rows_is_refused(
    path: str, size: str, lab: Laboratory
) -> None:
    body = assert_problem(lab.client().get(f"{path}?page_size={quote(size)}"), 422, "invalid_value")
    assert error_codes(body) == [("page_size", "out_of_range")]
    assert "from 1 to 200" in body["detail"]


@pytest.mark.parametrize("path", ALL_LISTS)
@pytest.mark.parametrize("name", ["statuss", "Project", "page", "offset", "ordering", "format"])
def test_a_filter_nobody_reads_is_refused(path: str, name: str, lab: Laboratory) -> None:
    body = assert_problem(lab.client().get(f"{path}?{name}=json"), 400, "unknown_field")
    assert error_codes(body) == [(name, "unknown_parameter")]
    known = body["detail"].partition("This address takes: ")[2].rstrip(".").split(", ")
    assert {"cursor", "page_size"} <= set(known)
    assert name not in known


def cursor(text: str) -> str:
    return base64.b64encode(text.encode()).decode()


@pytest.mark.parametrize("path", ALL_LISTS)
@pytest.mark.parametrize(
    "broken",
    ["", "xyz", "%%%", "cD1%", "\xe9", cursor("r=x"), cursor("o=-1"), cursor("o=1.5"),
     cursor("p=%00"), cursor("p=")],
)  # fmt: skip
def test_a_broken_cursor_is_refused(path: str, broken: str, lab: Laboratory) -> None:
    response = lab.client().get(f"{path}?cursor={quote(broken)}")
    assert "start again" in assert_problem(response, 400, "malformed_request")["detail"]


@pytest.mark.parametrize("position", ["abc", "1.5", "-1", "1e3", "9" * 19, "9" * 5000, "１"])
@pytest.mark.parametrize("path", ["/api/v1/reservations/", PROCEDURES])
def test_a_cursor_of_another_list_is_refused(path: str, position: str, lab: Laboratory) -> None:
    response = lab.client().get(f"{path}?cursor={quote(cursor('p=' + quote(position)))}")
    assert_problem(response, 400, "malformed_request")


@pytest.mark.parametrize(
    "path",
    [PROCEDURES + "?project=%00", PROCEDURES + "?state=a%00b", PROCEDURES + "%00/",
     "/api/v1/substances/?name=%00", "/api/v1/substances/a%00b/", BOTTLES + "%00/",
     BOTTLES + "GPA-1%00/movements/", BOTTLES + "?%00=1"],
)  # fmt: skip
def test_a_nul_in_an_address_is_refused_on_both_databases(path: str, lab: Laboratory) -> None:
    assert_problem(lab.client().get(path), 400, "malformed_request")


@pytest.mark.parametrize(
    ("query", "expected"),
    [
        ("?substance=dichloromethane", ["DCM-1", "DCM-2", "DCM-3"]),
        ("?place=DB&page_size=3", ["BFE-1", "BFE-2", "BIT-1", "INB-1", "AGT-1", "SCT-1", "SNC-1",
                                   "TMS-1"]),
        ("?status=quarantined", ["BFE-2"]),
        ("?place=DB&status=quarantined", ["BFE-2"]),
        ("?substance=dichloromethane&status=quarantined", []),
        ("?substance=nothing-of-this-name", []),
        ("?substance=' OR 1=1 --", []),
    ],
)  # fmt: skip
def test_bottles_are_filtered_on_every_page(
    query: str, expected: list[str], lab: Laboratory
) -> None:
    assert codes(walk(lab.client(), BOTTLES + query)) == sorted(expected)


@pytest.mark.parametrize(
    ("query", "expected"),
    [
        ("?cas=111-87-5", ["1-Octanol"]),
        ("?name=OCTANOL", ["1-Octanol"]),
        ("?name=octan", ["1-Octanol"]),
        ("?name=β-d-xylo", ["1,2,3,4-Tetra-O-acetyl-beta-D-xylopyranose"]),
        ("?name=octanol&cas=112-30-1", []),
        # a percent sign is no wildcard: only what has one in its name
        ("?name=%25", ["Palladium on carbon, 10 % palladium"]),
    ],
)
def test_substances_are_found_by_name_and_number(
    query: str, expected: list[str], lab: Laboratory
) -> None:
    found = lab.client().get("/api/v1/substances/" + query).json()["results"]
    assert [row["name"] for row in found] == expected


def test_procedures_are_filtered_by_project_and_state(lab: Laboratory) -> None:
    client = lab.client("INES")
    first = client.post(PROCEDURES, octyl_order()).json()["code"]
    second = client.post(PROCEDURES, octyl_order(project="GLYCAN-12")).json()["code"]
    lab.run_outbox()
    third = client.post(PROCEDURES, octyl_order()).json()["code"]

    def found(query: str) -> list[str]:
        return codes(walk(client, PROCEDURES + query))

    assert found("") == [third, second, first]
    assert found("?page_size=1") == [third, second, first]
    assert found("?project=LECTIN-07") == [third, first]
    assert found("?state=planned&page_size=1") == [second, first]
    assert found("?state=queued&project=LECTIN-07") == [third]
    assert found("?project=NO-SUCH") == []


def test_the_book_of_a_bottle_starts_with_its_newest_line(lab: Laboratory) -> None:
    client, keeper = lab.client(), lab.client("JONAS")
    accepted = client.post(PROCEDURES, octyl_order())
    lab.run_outbox()
    client.post(accepted["Location"] + "cancel/", If_Match="*")
    pages = walk(keeper, "/api/v1/bottles/GPA-1/movements/?page_size=2")
    lines = [line for page in pages for line in page]
    assert [(line["seq"], line["kind"]) for line in lines] == [
        (3, "release"),
        (2, "hold"),
        (1, "receipt"),
    ]
    assert [line["held_after_mass_mg"] for line in lines] == ["0", "2854", "0"]
    assert [line["held_change_mass_mg"] for line in lines] == ["-2854", "2854", "0"]
    assert [line["on_hand_after_mass_mg"] for line in lines] == ["100000"] * 3
    assert [line["actor"] for line in lines] == ["MIRA", "MIRA", "JONAS"]
    assert [line["entered"] for line in lines] == ["2854 mg", "2854 mg", "100 g"]
    assert lines[1]["amount_mmol"] == "7.23844"
    assert {line["booked_on"] for line in lines} == {"2026-12-01"}


def test_what_is_measured_is_given_back_in_the_unit_it_was_held_in(lab: Laboratory) -> None:
    client = lab.client()
    accepted = client.post(PROCEDURES, octyl_order())
    lab.run_outbox()
    client.post(accepted["Location"] + "cancel/", If_Match="*")
    (page,) = walk(lab.client("JONAS"), BOTTLES + "DCM-1/movements/?page_size=50")
    entered: dict[str, list[str]] = {"release": [], "hold": []}
    for line in page:
        entered.setdefault(line["kind"], []).append(line["entered"])
    assert sorted(entered["release"]) == sorted(entered["hold"])
    assert all(text.endswith(" mL") for text in entered["release"])
    assert len(entered["release"]) > 0


def test_amounts_are_plain_decimals_with_the_unit_in_the_name(lab: Laboratory) -> None:
    client = lab.client()
    expected = {
        "GLC-1": {"on_hand_mass_mg": "1000000", "usable_mass_mg": "999980"},
        "LOA-1": {"on_hand_mass_mg": "2500", "usable_mass_mg": "1480"},
        "OCT-1": {"on_hand_volume_ml": "500", "usable_volume_ml": "499.8"},
        "DCM-2": {"on_hand_volume_ml": "2500", "usable_volume_ml": "2450"},
        "CGG-1": {"on_hand_pieces": "2", "usable_pieces": "2"},
    }
    for code, amounts in expected.items():
        shown = client.get(f"{BOTTLES}{code}/").json()
        assert {name: shown[name] for name in amounts} == amounts
        ends = ("_mass_mg", "_volume_ml", "_pieces")
        found = {name for name in shown if name.endswith(ends)}
        assert {name for name in found if not name.startswith("least_")} == set(amounts)


def test_no_figure_of_the_stock_is_written_with_an_exponent(lab: Laboratory) -> None:
    client = lab.client("JONAS")
    figures = re.compile(r"_(mg|ml|pieces|pct|mmol|c|per_ml|per_mol)$")
    seen = 0
    paths = [*ALL_LISTS[:6], *(f"{BOTTLES}{code}/movements/" for code in ("DCM-2", "LOA-1"))]
    for path in paths:
        for row in (row for page in walk(client, path) for row in page):
            for name, value in row.items():
                if figures.search(name) and value is not None:
                    assert isinstance(value, str), (path, name)
                    assert PLAIN_DECIMAL.fullmatch(value), (path, name, value)
                    seen += 1
    assert seen > 300


def test_the_shelf_of_the_api_is_the_delivery_note(lab: Laboratory) -> None:
    """Amount, assay, density and dates of every bottle against the file that brought them."""
    factors = {"g": 1000, "kg": 1_000_000, "mL": 1, "L": 1000, "pieces": 1}
    rows = {row["code"]: row for page in walk(lab.client(), BOTTLES) for row in page}
    with Path(FOLDER / "stock.csv").open(newline="") as lines:
        for sent in csv.DictReader(lines):
            row = rows[sent["code"]]
            name = {"g": "mass_mg", "kg": "mass_mg", "mL": "volume_ml", "L": "volume_ml"}.get(
                sent["unit"], "pieces"
            )
            assert float(row[f"on_hand_{name}"]) == float(sent["amount"]) * factors[sent["unit"]]
            assert float(row["assay_pct"] or 0) == float(sent["assay_pct"] or 0)
            assert row["place"] == sent["place"]
            assert row["lot"] == sent["lot"]
            assert row["status"] == (sent["status"] or "usable")
            assert row["expires_on"] == (sent["expires_on"] or None)


@pytest.mark.parametrize(
    ("path", "field", "named"),
    [
        (PROCEDURES + "?state=plannd", "state", "queued, planned, refused, short"),
        (PROCEDURES + "?state=", "state", "queued, planned"),
        (PROCEDURES + "?state=PLANNED&project=LECTIN-07", "state", "queued, planned"),
        (BOTTLES + "?status=ok", "status", "usable, quarantined, disposed"),
        (BOTTLES + "?status=usable%20", "status", "usable, quarantined, disposed"),
    ],
)
def test_a_state_that_does_not_exist_is_refused_and_those_that_do_are_named(
    path: str, field: str, named: str, lab: Laboratory
) -> None:
    body = assert_problem(lab.client().get(path), 422, "invalid_value")
    (line,) = body["errors"]
    assert (line["field"], line["code"]) == (field, "unknown_value")
    assert line["detail"].startswith(f"{field} is one of: {named}")
    assert body["detail"] == line["detail"]


def test_a_format_is_an_unknown_parameter_like_any_other(lab: Laboratory) -> None:
    for value in ("json", "html"):
        body = assert_problem(lab.client().get(f"{BOTTLES}?format={value}"), 400, "unknown_field")
        assert "format" in body["detail"]
