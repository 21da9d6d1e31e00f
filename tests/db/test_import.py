"""A stock list comes in whole or not at all; every error is told with its row and column."""

import io
import re
from collections import Counter
from datetime import date
from decimal import Decimal
from pathlib import Path

import pytest
from django.core.management import CommandError, call_command

from inventory.errors import ImportRefused
from inventory.models import Bottle, Movement, Place, Reading, Substance
from inventory.services import import_stock
from inventory.services.importing import ImportResult
from inventory.services.receipt import heel_of
from labplan.base.errors import NotAllowed
from labplan.base.models import Event
from tests.db.bench import Shelf, codes_of, make_shelf, received_stock
from tests.laboratory import Laboratory

SERVICES = Path(__file__).resolve().parents[2] / "inventory" / "services"
DEMO = Path(__file__).resolve().parents[2] / "fixtures" / "demo"
SOUND = {
    "code": "T-1", "substance": "Toluene", "amount": "1", "unit": "L", "place": "S1",
    "received_on": "2026-06-15",
}  # fmt: skip
# BF3 is 47.8 % of its etherate: a label of 46.5 % counts it.
ETHERATE = {"substance": "Boron trifluoride diethyl etherate", "unit": "mL"}
POWDER = {"substance": "Chalk", "kind": "material", "unit": "g"}


@pytest.fixture
def shelf(db: None) -> Shelf:
    """A place S1 and people; the one bottle in it is called A."""
    return make_shelf(A=100_000)


def _csv(*rows: dict[str, str]) -> str:
    columns = list(dict.fromkeys(name for row in rows for name in row))
    lines = [",".join(columns)]
    lines += [",".join(f'"{row.get(name, "")}"' for name in columns) for row in rows]
    return "\n".join(lines) + "\n"


def _import(shelf: Shelf, folder: Path, content: str | bytes, places: str = "") -> ImportResult:
    bottles_file, places_file = folder / "stock.csv", folder / "places.csv"
    bottles_file.write_bytes(content if isinstance(content, bytes) else content.encode())
    places_file.write_text(places)
    return import_stock(
        actor=shelf.actor("stock_keeper"),
        bottles_file=bottles_file,
        places_file=places_file if places else None,
    )


def _refusal(
    shelf: Shelf, folder: Path, content: str | bytes, places: str = ""
) -> list[tuple[str, str]]:
    """(where, code) of each error; nothing may have been stored."""
    before = received_stock()
    with pytest.raises(ImportRefused, match="Nothing was changed") as refused:
        _import(shelf, folder, content, places)
    assert received_stock() == before
    return codes_of(refused.value.errors)


def test_the_demo_stock_by_kind(lab: Laboratory) -> None:
    assert Counter(Bottle.objects.values_list("measured_by", flat=True)) == {
        "mass": 39,
        "volume": 26,
        "count": 1,
    }
    assert Counter(Bottle.objects.values_list("form__kind", flat=True)) == {
        "neat": 57,
        "hydrate": 5,
        "solution": 2,
        "loaded": 1,
        "anomer_mixture": 1,
    }
    assert Counter(Bottle.objects.values_list("status", flat=True)) == {
        "usable": 65,
        "quarantined": 1,
    }
    assert Counter(Bottle.objects.values_list("stabiliser_state", flat=True)) == {
        "not_applicable": 57,
        "none": 5,
        "known": 4,
    }
    assert Counter(Reading.objects.values_list("kind", flat=True)) == {
        "water_ppm": 10,
        "activation_c": 1,
    }
    assert Place.objects.count() == 13
    assert Counter(Movement.objects.values_list("kind", flat=True)) == {"receipt": 66, "hold": 1}


def test_every_amount_of_the_demo_stock_is_as_written(lab: Laboratory) -> None:
    factors = {"g": 10**6, "kg": 10**9, "mL": 10**6, "L": 10**9, "pieces": 1}
    for movement in Movement.objects.filter(kind="receipt"):
        written = Decimal(movement.entered_amount) * factors[movement.entered_unit]
        assert movement.on_hand_change == written
        assert (movement.seq, movement.on_hand_after) == (1, written)


def test_what_cannot_be_got_out_depends_on_what_is_in(lab: Laboratory) -> None:
    heels = {code: lab.bottle(code).heel for code in ("DCM-1", "DCM-2", "BFE-1", "GPA-1", "CGG-1")}
    assert heels == {
        "DCM-1": 20_000_000,  # a solvent: 2 % of 1 L
        "DCM-2": 50_000_000,  # 2 % of 2.5 L
        "BFE-1": 200_000,  # a liquid reagent: 0.2 mL
        "GPA-1": 20_000,  # a solid: 20 mg
        "CGG-1": 0,  # pieces
    }
    assert heel_of("volume", 100_000_000, is_solvent=True) == 5_000_000  # at least 5 mL
    assert heel_of("volume", 3_000_000, is_solvent=True) == 3_000_000  # never over what is in it
    assert heel_of("volume", 100_000, is_solvent=False) == 100_000
    assert heel_of("mass", 15_000, is_solvent=False) == 15_000


def test_moles_at_receipt_are_those_worked_out_by_hand(lab: Laboratory) -> None:
    """GPA-1: 100 g x 0.990 (qNMR) / 390.341 g/mol (C16H22O11)
           = 99.0 / 390.341 = 0.25362 mol.
    BFE-1: 100 mL x 1.125 g/mL = 112.5 g, of it 46.5 % BF3 = 52.3125 g;
           / 67.81 g/mol (B 10.81 + 3 x 18.998) = 0.77146 mol BF3 = mol etherate, one each.
    """
    moles = dict(
        Movement.objects.filter(seq=1, bottle__code__in=["GPA-1", "BFE-1"]).values_list(
            "bottle__code", "amount_nmol"
        )
    )
    assert moles["GPA-1"] == pytest.approx(253_624_000, abs=10_000)
    assert moles["BFE-1"] == pytest.approx(771_460_000, abs=100_000)


def test_moles_are_left_open_where_the_label_does_not_say_enough(lab: Laboratory) -> None:
    opened = Movement.objects.filter(seq=1, amount_nmol=None).values_list("bottle__code", flat=True)
    assert {"SIL-1", "CEL-1", "MS-1", "CGG-1"} <= set(opened)
    assert {"GPA-1", "OCT-1", "NAM-1", "AZE-1", "LAC-1"}.isdisjoint(opened)


ROW_ERRORS: list[tuple[dict[str, str], str, str]] = [
    ({"code": "T 1"}, "code", "bad_code"),
    ({"code": "T" * 25}, "code", "bad_code"),
    ({"code": "A"}, "code", "bottle_exists"),
    ({"place": "S9"}, "place", "unknown_place"),
    ({"unit": "oz"}, "unit", "unknown_unit"),
    ({"unit": "ml"}, "unit", "unknown_unit"),
    ({"amount": "1,5"}, "amount", "decimal_comma"),
    ({"amount": "much"}, "amount", "not_a_number"),
    ({"amount": "NaN"}, "amount", "not_a_number"),
    ({"amount": "Infinity"}, "amount", "not_a_number"),
    ({"amount": "1_000"}, "amount", "not_a_number"),
    ({"amount": "1e3"}, "amount", "not_a_number"),
    ({"amount": "１２"}, "amount", "not_a_number"),
    ({"amount": "0"}, "amount", "out_of_range"),
    ({"amount": "-1"}, "amount", "out_of_range"),
    ({"amount": "1000001"}, "amount", "out_of_range"),
    ({"amount": "0.0000000001"}, "amount", "too_many_digits"),
    ({**POWDER, "amount": "0.0000001"}, "amount", "too_many_digits"),
    ({"unit": "pieces", "amount": "1.5"}, "amount", "too_many_digits"),
    ({"amount": "0" * 40 + "1"}, "amount", "too_long"),
    ({"amount": ""}, "amount", "missing"),
    ({"received_on": ""}, "received_on", "missing"),
    ({"received_on": "15.06.2026"}, "received_on", "not_a_date"),
    ({"received_on": "06/15/2026"}, "received_on", "not_a_date"),
    ({"received_on": "20260615"}, "received_on", "not_a_date"),
    ({"received_on": "2026-W25-1"}, "received_on", "not_a_date"),
    ({"received_on": "2026-02-30"}, "received_on", "not_a_date"),
    ({"received_on": "2026-12-02"}, "received_on", "in_the_future"),
    ({"opened_on": "2027-01-01"}, "opened_on", "in_the_future"),
    ({"activated_on": "2027-01-01"}, "activated_on", "in_the_future"),
    ({"expires_on": "soon"}, "expires_on", "not_a_date"),
    ({"water_ppm": "20"}, "water_read_on", "missing"),
    ({"water_ppm": "20", "water_read_on": "2026-12-24"}, "water_read_on", "in_the_future"),
    ({"water_ppm": "20", "water_read_on": "24.11.2026"}, "water_read_on", "not_a_date"),
    ({"water_ppm": "-1", "water_read_on": "2026-11-24"}, "water_ppm", "out_of_range"),
    ({"assay_pct": "101"}, "assay_pct", "out_of_range"),
    ({"assay_pct": "99.00001"}, "assay_pct", "too_many_digits"),
    ({"assay_of": "water?"}, "assay_of", "not_a_formula"),
    ({"assay_pct": "46.5", "assay_of": "BF3"}, "assay_of", "not_a_part"),
    ({**ETHERATE, "assay_pct": "46.5"}, "assay_of", "missing"),
    ({**ETHERATE, "assay_pct": "46.5", "assay_of": "UF6"}, "assay_of", "not_a_part"),
    ({**ETHERATE, "assay_pct": "60", "assay_of": "BF3"}, "assay_pct", "more_than_all"),
    ({"unit": "pieces"}, "unit", "not_countable"),
    ({"opened_on": "2026-06-14"}, "opened_on", "before_receipt"),
    ({"assay_of": "CH" * 30}, "assay_of", "too_long"),
    ({"assay_kind": "guess"}, "assay_kind", "not_a_choice"),
    ({"status": "lost"}, "status", "not_a_choice"),
    ({"kind": "wish"}, "kind", "not_a_choice"),
    ({"stabiliser_basis": "v/w"}, "stabiliser_basis", "not_a_choice"),
    ({"stabiliser": "x" * 61}, "stabiliser", "too_long"),
    ({"lot": "x" * 61}, "lot", "too_long"),
    ({"supplier": "x" * 81}, "supplier", "too_long"),
    ({"note": "x" * 201}, "note", "too_long"),
    ({"density_g_per_ml": "26"}, "density_g_per_ml", "out_of_range"),
    ({"density_temperature_c": "20000"}, "density_temperature_c", "out_of_range"),
    ({"density_temperature_c": "20.25"}, "density_temperature_c", "too_many_digits"),
    ({"form": "gas"}, "form", "not_a_choice"),
    ({"form": "hydrate"}, "hydrate_water", "missing"),
    ({"form": "hydrate", "hydrate_water": "0"}, "hydrate_water", "out_of_range"),
    ({"form": "anomer_mixture"}, "active_share_pct", "missing"),
    ({"form": "solution", "solution_basis": "pct_w_w"}, "solution_value", "missing"),
    ({"form": "solution", "solution_value": "1"}, "solution_basis", "not_a_choice"),
    (
        {"form": "solution", "solution_basis": "pct_w_w", "solution_value": "120"},
        "solution_value", "out_of_range",
    ),
    (
        {"form": "solution", "solution_basis": "mol_per_l", "solution_value": "1"},
        "density_g_per_ml", "missing",
    ),
    (
        {"form": "solution", "solution_basis": "equiv_per_l", "solution_value": "1"},
        "solution_basis", "equivalents_say_no_moles",
    ),
    (
        {"form": "solution", "solution_basis": "pct_w_w", "solution_value": "1",
         "solution_solvent": "Moonshine"},
        "solution_solvent", "unknown_substance",
    ),
    ({"substance": "Moonshine"}, "substance", "unknown_substance"),
    ({"substance": "x" * 201, "kind": "material"}, "substance", "too_long"),
    ({"cas": "108-88-4"}, "cas", "bad_check_digit"),
    ({"cas": "75-09-2"}, "cas", "cas_and_name_differ"),
    ({"smiles": "C1CC"}, "smiles", "smiles_unreadable"),
    ({"smiles": "C*"}, "smiles", "no_inchikey"),
    ({"smiles": "C" * 1100}, "smiles", "no_inchikey"),
    ({"smiles": "CCO", "cas": "108-88-3"}, "cas", "cas_and_structure_differ"),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "column", "code"), ROW_ERRORS)
def test_a_wrong_value_is_named_once_with_its_row_and_column(
    shelf: Shelf, tmp_path: Path, changes: dict[str, str], column: str, code: str
) -> None:
    sound = {**SOUND, "code": "T-0"}
    errors = _refusal(shelf, tmp_path, _csv({**sound, **dict.fromkeys(changes, "")} | sound,
                                            {**SOUND, **changes}))  # fmt: skip
    assert errors == [(f"row 3, {column}", code)]


HEADER = ",".join(SOUND)
LINE = ",".join(SOUND.values())
FILE_ERRORS: list[tuple[str | bytes, list[tuple[str, str]]]] = [
    ("", [("stock.csv", "empty")]),
    (f"{HEADER}\n{LINE}\n".replace(",", ";"), [("stock.csv", "semicolons")]),
    (_csv(SOUND).replace(",", ";"), [("stock.csv", "not_csv")]),
    ("código\n".encode("cp1252"), [("stock.csv", "not_utf8")]),
    (_csv(SOUND).encode("utf-16"), [("stock.csv", "not_utf8")]),
    (f'{HEADER}\n"T-1"x,Toluene\n', [("stock.csv", "not_csv")]),
    (f"{HEADER}\n{LINE}\0\n", [("stock.csv", "not_csv")]),
    (f"{HEADER},colour\n{LINE},red\n", [("stock.csv", "unknown_column")]),
    (f"{HEADER},code\n{LINE},T-2\n", [("stock.csv", "repeated_column")]),
    (
        "code,substance\nT-1,Toluene\n",
        [("stock.csv", "missing_column")] * 4,
    ),
    (f"{HEADER}\n{LINE},more\n", [("row 2", "wrong_width")]),
    (f"{HEADER}\n\n{LINE},more\n", [("row 3", "wrong_width")]),
    (f"{HEADER}\n{LINE}\n{LINE}\n", [("row 3, code", "bottle_exists")]),
]


@pytest.mark.parametrize(("content", "expected"), FILE_ERRORS)
def test_a_file_that_is_not_as_meant_is_refused(
    shelf: Shelf, tmp_path: Path, content: str | bytes, expected: list[tuple[str, str]]
) -> None:
    assert _refusal(shelf, tmp_path, content) == expected


def test_a_file_that_is_not_there_is_named(shelf: Shelf, tmp_path: Path) -> None:
    before = received_stock()
    with pytest.raises(ImportRefused) as refused:
        import_stock(actor=shelf.actor("stock_keeper"), bottles_file=tmp_path / "no.csv")
    assert codes_of(refused.value.errors) == [("no.csv", "unreadable")]
    assert received_stock() == before


PLACE_ERRORS = [
    ("C 1,Name,no,20", "code", "bad_code"),
    ("C1,,no,20", "name", "missing"),
    (f"C1,{'n' * 121},no,20", "name", "too_long"),
    ("C1,Name,perhaps,20", "is_locked", "not_a_choice"),
    ("C1,Name,no,20000", "temperature_c", "out_of_range"),
    ("C1,Name,no,20.25", "temperature_c", "too_many_digits"),
]


@pytest.mark.parametrize(("line", "column", "code"), PLACE_ERRORS)
def test_a_wrong_place_is_named_and_nothing_of_it_kept(
    shelf: Shelf, tmp_path: Path, line: str, column: str, code: str
) -> None:
    places = f"code,name,is_locked,temperature_c\nC0,Sound,no,20\n{line}\n"
    assert _refusal(shelf, tmp_path, _csv(SOUND), places) == [(f"row 3, {column}", code)]


def test_a_place_twice_in_a_file_is_refused(shelf: Shelf, tmp_path: Path) -> None:
    places = "code,name\nC1,One\nC1,Two\n"
    assert _refusal(shelf, tmp_path, _csv(SOUND), places) == [("row 3, code", "place_repeated")]


def test_two_lines_without_a_code_are_no_repetition(shelf: Shelf, tmp_path: Path) -> None:
    nameless = {**SOUND, "code": ""}
    errors = _refusal(shelf, tmp_path, _csv(nameless, nameless), "code,name\n,One\n,Two\n")
    assert errors == [("row 2, code", "missing"), ("row 3, code", "missing")] * 2


def test_every_code_the_import_can_say_is_produced_here() -> None:
    """The codes are read from the sources, so that a new one needs a test."""
    said: set[str] = set()
    for name in ("csv_rows", "stock_row", "substances", "importing", "receiving"):
        text = (SERVICES / f"{name}.py").read_text()
        said |= set(re.findall(r'\.(?:error|add)\(\s*[^,()]+(?:\([^()]*\))?,\s*"(\w+)"', text))
        said |= set(re.findall(r'errors\.add\(\s*f"[^"]*",\s*"(\w+)"', text))
    produced = {code for *_, code in ROW_ERRORS} | {code for *_, code in PLACE_ERRORS}
    produced |= {code for _, errors in FILE_ERRORS for _, code in errors}
    produced |= {"unreadable", "place_repeated"}
    assert len(said) > 25
    assert produced == said


def test_all_errors_of_a_file_are_told_together(shelf: Shelf, tmp_path: Path) -> None:
    errors = _refusal(
        shelf, tmp_path,
        _csv(
            {**SOUND, "amount": "1,5", "place": "S9"},
            {**SOUND, "code": "T-2"},
            {**SOUND, "code": "T-3", "unit": "oz", "received_on": "1.2.2026"},
        ),
    )  # fmt: skip
    assert sorted(errors) == [
        ("row 2, amount", "decimal_comma"),
        ("row 2, place", "unknown_place"),
        ("row 4, received_on", "not_a_date"),
        ("row 4, unit", "unknown_unit"),
    ]


def test_a_byte_order_mark_and_windows_line_ends_are_no_error(shelf: Shelf, tmp_path: Path) -> None:
    content = b"\xef\xbb\xbf" + _csv(SOUND).replace("\n", "\r\n").encode()
    assert _import(shelf, tmp_path, content) == ImportResult(places=0, bottles=1)
    bottle = shelf.bottle("T-1")
    assert bottle.balance.on_hand == 10**9
    assert bottle.received_on == date(2026, 6, 15)
    movement = Movement.objects.get(bottle=bottle)
    assert (movement.entered_amount, movement.entered_unit) == ("1", "L")
    assert movement.reason == "import of stock.csv"


def test_a_second_import_of_the_same_file_is_refused(shelf: Shelf, tmp_path: Path) -> None:
    content = _csv(SOUND, {**SOUND, "code": "T-2"})
    assert _import(shelf, tmp_path, content).bottles == 2
    assert _refusal(shelf, tmp_path, content) == [
        ("row 2, code", "bottle_exists"),
        ("row 3, code", "bottle_exists"),
    ]


def test_one_substance_however_it_is_called(shelf: Shelf, tmp_path: Path) -> None:
    """By name, by CAS number and by structure: one substance, one form."""
    content = _csv(
        SOUND,
        {**SOUND, "code": "T-2", "substance": "TOLUENE", "cas": "108-88-3"},
        {**SOUND, "code": "T-3", "substance": "methylbenzene", "smiles": "Cc1ccccc1"},
    )
    assert _import(shelf, tmp_path, content).bottles == 3
    forms = set(Bottle.objects.filter(code__startswith="T-").values_list("form", flat=True))
    assert len(forms) == 1
    assert Substance.objects.filter(inchikey="YXFVVABEGXRONW-UHFFFAOYSA-N").count() == 1


def test_a_long_file_name_is_cut_not_fatal(shelf: Shelf, tmp_path: Path) -> None:
    path = tmp_path / f"{'stock-' * 30}.csv"
    path.write_text(_csv(SOUND))
    import_stock(actor=shelf.actor("stock_keeper"), bottles_file=path)
    event = Event.objects.get(kind="stock.imported")
    assert event.subject == path.name[:80]


@pytest.mark.parametrize("role", ["viewer", "chemist", "approver", "lead"])
def test_who_does_not_keep_the_stock_imports_nothing(
    shelf: Shelf, tmp_path: Path, role: str
) -> None:
    path, before = tmp_path / "stock.csv", received_stock()
    path.write_text(_csv(SOUND))
    with pytest.raises(NotAllowed, match="stock_keeper"):
        import_stock(actor=shelf.actor(role), bottles_file=path)
    assert received_stock() == before


def test_the_command_tells_each_error_and_fails(shelf: Shelf, tmp_path: Path) -> None:
    path, before = tmp_path / "stock.csv", received_stock()
    path.write_text(_csv({**SOUND, "amount": "1,5"}))
    with pytest.raises(CommandError) as failed:
        call_command("import_stock", str(path), person="STOCK_KEEPER", stdout=io.StringIO())
    assert "  row 2, amount: Write numbers with a decimal point. [decimal_comma]" in str(
        failed.value
    )
    with pytest.raises(CommandError, match="no active person 'NOBODY'"):
        call_command("import_stock", str(path), person="NOBODY", stdout=io.StringIO())
    assert received_stock() == before


def test_the_command_says_what_came_in(shelf: Shelf, tmp_path: Path) -> None:
    path, said = tmp_path / "stock.csv", io.StringIO()
    path.write_text(_csv({**SOUND, "place": "S1"}))
    call_command(
        "import_stock", str(path), places=DEMO / "places.csv", person="STOCK_KEEPER", stdout=said
    )
    assert said.getvalue() == "1 bottles and 12 new places imported.\n"
