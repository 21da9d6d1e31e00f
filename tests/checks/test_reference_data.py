"""The packaged substances, statements and classifications, held against each other and outside.

Pure: reads the files, RDKit and molmass. Figures quoted here name where they come from.
"""

import json
import re
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from molmass import Formula
from rdkit import Chem
from rdkit.Chem.Descriptors import MolWt
from rdkit.Chem.rdMolDescriptors import CalcMolFormula

FIXTURES = Path(__file__).resolve().parents[2] / "fixtures"
FILES = ("classifications", "sources", "statements", "substances")

# weakest first; a row is graded by its weakest statement
GRADES = [
    "from memory",
    "estimated",
    "computed",
    "common practice",
    "vendor",
    "compilation",
    "review",
    "primary",
]
TAGS = {
    "alcohol",
    "alkene",
    "azide",
    "donor",
    "free-sugar",
    "peroxide-former",
    "precursor-chemical",
    "promoter",
    "purification",
    "reagent",
    "solvent",
    "water-reactive",
    "workup",
}
PROPERTIES = {
    "boiling_point_c",
    "density_g_per_ml",
    "flash_point_c",
    "melting_point_c",
    "molar_mass_g_per_mol",
}
# short class names of CLP against the class names of UN GHS in statements.json
CLASS_NAMES = {
    "Acute Tox. (dermal)": "Acute toxicity, dermal",
    "Acute Tox. (inhalation)": "Acute toxicity, inhalation",
    "Acute Tox. (oral)": "Acute toxicity, oral",
    "Aquatic Acute": "Hazardous to the aquatic environment, acute",
    "Aquatic Chronic": "Hazardous to the aquatic environment, long-term",
    "Asp. Tox.": "Aspiration hazard",
    "Carc.": "Carcinogenicity",
    "Eye Dam.": "Serious eye damage/eye irritation",
    "Eye Irrit.": "Serious eye damage/eye irritation",
    "Flam. Liq.": "Flammable liquids",
    "Met. Corr.": "Corrosive to metals",
    "Repr.": "Reproductive toxicity",
    "STOT RE": "Specific target organ toxicity, repeated exposure",
    "STOT SE": "Specific target organ toxicity, single exposure",
    "Self-heat.": "Self-heating substances and mixtures",
    "Skin Corr.": "Skin corrosion/irritation",
    "Skin Irrit.": "Skin corrosion/irritation",
    "Skin Sens.": "Skin sensitization",
}


def load(name: str) -> dict[str, Any]:
    return json.loads((FIXTURES / f"{name}.json").read_text(encoding="utf-8"))


@cache
def substances() -> dict[str, dict[str, Any]]:
    return {row["key"]: row for row in load("substances")["substances"]}


@cache
def classifications() -> dict[str, dict[str, Any]]:
    return {row["substance"]: row for row in load("classifications")["classifications"]}


@cache
def sources() -> dict[str, dict[str, Any]]:
    return {row["key"]: row for row in load("sources")["sources"]}


@cache
def statements(group: str) -> dict[str, dict[str, Any]]:
    return {row["code"]: row for row in load("statements")[group]}


def structures() -> list[str]:
    return [key for key, row in substances().items() if row["smiles"]]


def codes(key: str) -> list[str]:
    return [hazard["code"] for hazard in classifications()[key]["hazards"]]


def density(key: str) -> tuple[float, float | None]:
    (found,) = [p for p in substances()[key]["properties"] if p["name"] == "density_g_per_ml"]
    return found["value"], found["temperature_c"]


# --- the files


@pytest.mark.parametrize("name", FILES)
def test_files_are_canonical(name: str) -> None:
    text = (FIXTURES / f"{name}.json").read_bytes().decode("utf-8")
    again = json.dumps(json.loads(text), indent=2, ensure_ascii=False, sort_keys=True) + "\n"
    assert text == again


@pytest.mark.parametrize(
    ("name", "group", "key", "count"),
    [
        ("sources", "sources", "key", 35),
        ("substances", "substances", "key", 65),
        ("classifications", "classifications", "substance", 65),
        ("statements", "hazard", "code", 112),
        ("statements", "precautionary", "code", 163),
        ("statements", "eu_supplemental", "code", 22),
    ],
)
def test_rows_are_counted_sorted_and_unique(name: str, group: str, key: str, count: int) -> None:
    keys = [row[key] for row in load(name)[group]]
    assert len(keys) == count
    assert keys == sorted(set(keys))


def test_rows_of_a_table_have_the_same_fields() -> None:
    for name in FILES:
        for group, rows in load(name).items():
            if group != "meta":
                assert len({frozenset(row) for row in rows}) == 1, (name, group)


def test_every_source_resolves() -> None:
    used = {row["source"] for row in classifications().values()}
    for group in ("hazard", "precautionary", "eu_supplemental"):
        used |= {row["source"] for row in statements(group).values()}
    for row in substances().values():
        used |= {entry["source"] for entry in row["properties"]}
    assert used <= set(sources())


def test_sources_are_of_a_known_kind_and_say_what_they_are() -> None:
    known = {"primary", "review", "compilation", "vendor", "regulation", "handbook", "own"}
    for row in sources().values():
        assert row["kind"] in known
        assert row["citation"].strip()
        assert row["doi"] is None or re.fullmatch(r"10\.\d{4,}/\S+", row["doi"])


def test_no_evidence_is_blank_or_unknown() -> None:
    for row in classifications().values():
        assert row["evidence"] in (GRADES if row["established"] else ["not known"])
        assert all(hazard["evidence"] in GRADES for hazard in row["hazards"])
    for row in substances().values():
        assert row["cas_evidence"] in (GRADES if row["cas"] else ["not known"])
        assert all(entry["evidence"] in GRADES for entry in row["properties"])
    for group in ("hazard", "precautionary", "eu_supplemental"):
        assert all(row["evidence"] in GRADES for row in statements(group).values())


# --- substances


def cas_check_digit(cas: str) -> int:
    body = cas.replace("-", "")[:-1]
    return sum(place * int(digit) for place, digit in enumerate(reversed(body), start=1)) % 10


def test_cas_check_digits() -> None:
    numbers = [row["cas"] for row in substances().values() if row["cas"]]
    assert len(numbers) == len(set(numbers)) == 59
    for cas in numbers:
        assert re.fullmatch(r"\d{2,7}-\d{2}-\d", cas)
        assert cas_check_digit(cas) == int(cas[-1]), cas


def test_kinds_and_tags() -> None:
    for key, row in substances().items():
        assert (row["kind"] == "defined") == bool(row["smiles"]), key
        assert row["kind"] in {"defined", "mixture", "material"}
        assert set(row["tags"]) <= TAGS
        assert row["tags"] == sorted(set(row["tags"]))


@pytest.mark.parametrize("key", structures())
def test_structure_and_molar_mass(key: str) -> None:
    molecule = Chem.MolFromSmiles(substances()[key]["smiles"])
    assert molecule is not None
    unassigned = Chem.FindMolChiralCenters(
        molecule, includeUnassigned=True, useLegacyImplementation=False
    )
    assert not [centre for centre in unassigned if centre[1] == "?"]
    # The salts are drawn as ions: the whole is neutral, so the formula carries no charge. The
    # libraries take other atomic weights (C 12.011 and 12.0107, S 32.067 and 32.065), which makes
    # up to 23 parts in a million; one hydrogen more or less is 1400 in the heaviest structure.
    other = Formula(CalcMolFormula(molecule)).mass
    assert MolWt(molecule) == pytest.approx(other, abs=0.003, rel=25e-6)


def test_molar_masses_are_pinned() -> None:
    # both libraries start from the SMILES: only a pinned sum shows that one was changed
    total = sum(MolWt(Chem.MolFromSmiles(substances()[key]["smiles"])) for key in structures())
    assert total == pytest.approx(13068.2, abs=0.05)


def test_structures_are_distinct() -> None:
    keys = [Chem.MolToInchiKey(Chem.MolFromSmiles(substances()[k]["smiles"])) for k in structures()]
    assert len(keys) == len(set(keys)) == 57


@pytest.mark.parametrize(
    ("tag", "smarts", "exact"),
    [
        ("azide", "N=[N+]=[N-]", True),
        ("alkene", "[C;!a]=[C;!a]", True),
        ("donor", "CC(=O)OC1C(OC(C)=O)COCC1", False),
        ("alcohol", "[CX4][OX2H]", False),
        ("free-sugar", "[OX2H]C1OCC(O)C(O)C1O", False),
    ],
)
def test_tags_agree_with_structures(tag: str, smarts: str, exact: bool) -> None:
    pattern = Chem.MolFromSmarts(smarts)
    matching = {
        key
        for key in structures()
        if Chem.MolFromSmiles(substances()[key]["smiles"]).HasSubstructMatch(pattern)
    }
    tagged = {key for key, row in substances().items() if tag in row["tags"]}
    assert tagged
    assert (tagged == matching) if exact else (tagged <= matching)


def test_properties() -> None:
    for key, row in substances().items():
        names = [entry["name"] for entry in row["properties"]]
        assert names == sorted(set(names)), key
        assert set(names) <= PROPERTIES
        assert "molar_mass_g_per_mol" not in names or row["smiles"] is None
        for entry in row["properties"]:
            if entry["name"] != "density_g_per_ml":
                assert entry["temperature_c"] is None
            # a density without its temperature says so
            elif entry["temperature_c"] is None:
                assert "no temperature" in entry["note"]


def test_densities_are_pinned() -> None:
    found = [
        entry["value"]
        for row in substances().values()
        for entry in row["properties"]
        if entry["name"] == "density_g_per_ml"
    ]
    assert len(found) == 22
    assert sum(found) == pytest.approx(22.9557, abs=1e-9)


@pytest.mark.parametrize(
    ("key", "molar_mass"),
    [
        # computed by hand from C 12.011, H 1.008, O 15.999, F 18.998, B 10.81
        ("boron-trifluoride-diethyl-etherate", 141.928),
        ("beta-lactose-octaacetate", 678.593),
        ("4-penten-1-ol", 86.134),
        ("acetic-anhydride", 102.089),
        ("lactose", 342.297),
    ],
)
def test_molar_masses_of_the_demo_route(key: str, molar_mass: float) -> None:
    molecule = Chem.MolFromSmiles(substances()[key]["smiles"])
    assert MolWt(molecule) == pytest.approx(molar_mass, abs=0.003)


@pytest.mark.parametrize(
    ("key", "grams_per_ml", "temperature_c"),
    [
        # CRC Handbook of Chemistry and Physics, Physical Constants of Organic Compounds
        ("dichloromethane", 1.3266, 20),
        ("methanol", 0.7914, 20),
        ("4-penten-1-ol", 0.8457, 20),
        ("1-octanol", 0.8262, 25),
        ("acetic-anhydride", 1.082, 20),
        # Montgomery, Groundwater Chemicals Desk Reference, quoted in the reference collection
        ("triethylamine", 0.7275, 20),
        # NTP Chemical Repository, pyridine, 1991
        ("pyridine", 0.9819, 20),
    ],
)
def test_densities_quoted_elsewhere(key: str, grams_per_ml: float, temperature_c: int) -> None:
    assert density(key) == (grams_per_ml, temperature_c)


# --- statements


def test_statements_have_texts_and_combined_codes_have_parts() -> None:
    for group in ("hazard", "precautionary", "eu_supplemental"):
        known = statements("hazard") | statements("precautionary")
        for code, row in statements(group).items():
            assert row["text"].strip()
            assert row["print_text"].strip()
            assert row["edition"]
            assert row["status"]
            parts = [part.strip("[]") for part in row["combined_of"]]
            assert set(parts) <= set(known), code
            assert bool(parts) == ("+" in code)


def test_a_sheet_shows_no_instruction_to_the_writer() -> None:
    for row in statements("hazard").values():
        assert "(state" not in row["print_text"]
        assert "(or state" not in row["print_text"]


# --- classifications


def label_pictograms(found: list[str]) -> list[str]:
    """Pictograms from the statements alone, after CLP Article 26 and GHS 1.4.10.5.3."""
    by_code = {code: set(statements("hazard")[code]["pictograms"]) for code in found}
    symbols = set().union(*by_code.values())
    exclamation = {code for code in found if "GHS07" in by_code[code]}
    irritation = {"H315", "H319"}
    if "GHS06" in symbols:
        exclamation = set()
    if {"H314", "H318"} & set(found):
        exclamation -= irritation
    if "H334" in found:
        exclamation -= irritation | {"H317"}
    return sorted(symbols - (set() if exclamation else {"GHS07"}))


def test_precedence_of_pictograms() -> None:
    assert label_pictograms(["H301", "H315", "H336"]) == ["GHS06"]
    assert label_pictograms(["H314", "H319"]) == ["GHS05"]
    assert label_pictograms(["H314", "H302"]) == ["GHS05", "GHS07"]
    assert label_pictograms(["H290", "H315"]) == ["GHS05", "GHS07"]
    assert label_pictograms(["H334", "H317"]) == ["GHS08"]


def test_every_substance_has_one_row() -> None:
    assert set(classifications()) == set(substances())


@pytest.mark.parametrize("key", list(classifications()))
def test_codes_resolve_to_texts_of_their_class(key: str) -> None:
    row = classifications()[key]
    for hazard in row["hazards"]:
        text = statements("hazard")[hazard["code"]]
        assert CLASS_NAMES[hazard["class"]] in text["class"], hazard
        assert hazard["category"] in re.findall(r"\d[A-C]?", text["category"]), hazard
    assert len(codes(key)) == len(set(codes(key)))
    assert codes(key) == sorted(codes(key))
    assert set(row["supplemental"]) <= set(statements("eu_supplemental"))
    assert len(set(row["precautionary"])) == len(row["precautionary"]) <= 6
    for code in row["precautionary"]:
        status = statements("precautionary")[code]["status"]
        # the rows follow CLP: no code that it does not have
        assert not status.startswith("deleted in an earlier revision")
        assert "NOT in CLP" not in status


@pytest.mark.parametrize("key", list(classifications()))
def test_label_follows_from_statements(key: str) -> None:
    row = classifications()[key]
    assert row["pictograms"] == label_pictograms(codes(key))
    words = {statements("hazard")[code]["signal_word"] for code in codes(key)}
    severest = "Danger" if "Danger" in words else "Warning" if "Warning" in words else None
    assert row["signal_word"] == severest
    # corrosive, toxic and target-organ statements are never left without advice
    assert bool(row["precautionary"]) == bool(row["hazards"])


def test_hazards_are_pinned() -> None:
    # one statement lost or added anywhere is seen here
    assert sum(len(row["hazards"]) for row in classifications().values()) == 126
    assert sum(len(row["supplemental"]) for row in classifications().values()) == 4
    grades = {"from memory": 53, "estimated": 4, "vendor": 26, "compilation": 43}
    found = [h["evidence"] for row in classifications().values() for h in row["hazards"]]
    assert {word: found.count(word) for word in set(found)} == grades


def test_one_signal_word_a_code() -> None:
    # the test above takes the most severe word of a code: none in use may have two
    for key in classifications():
        for code in codes(key):
            allocations = statements("hazard")[code]["allocations"]
            assert len({entry["signal_word"] for entry in allocations}) == 1, code


def test_unknown_is_not_unclassified() -> None:
    unknown = {key for key, row in classifications().items() if not row["established"]}
    for key in unknown:
        row = classifications()[key]
        assert row["hazards"] == row["pictograms"] == row["supplemental"] == []
        assert row["signal_word"] is None
        assert row["note"].strip()
    donors = {key for key, row in substances().items() if "donor" in row["tags"]}
    assert donors <= unknown
    assert {"2-azidoethanol", "palladium-on-carbon-10", "sulfonic-resin-h"} <= unknown
    assert len(unknown) == 19


def test_row_is_graded_by_its_weakest_statement() -> None:
    for key, row in classifications().items():
        if row["hazards"]:
            grades = [hazard["evidence"] for hazard in row["hazards"]]
            assert row["evidence"] == min(grades, key=GRADES.index), key


def test_a_day_of_reading_means_that_something_was_read() -> None:
    for key, row in classifications().items():
        if row["date"]:
            assert re.fullmatch(r"\d{4}-\d{2}-\d{2}", row["date"])
            grades = {hazard["evidence"] for hazard in row["hazards"]} or {row["evidence"]}
            assert grades & {"vendor", "compilation", "review", "primary"}, key


@pytest.mark.parametrize(
    ("key", "expected", "signal_word"),
    [
        # supplier sheet, dichloromethane, 2020-12-31; H351 alone is the harmonised entry
        ("dichloromethane", "H315 H319 H336 H351", "Warning"),
        # BGN, GHS portal, methanol
        ("methanol", "H225 H301 H311 H331 H370", "Danger"),
        # directory sheets of 2024-04-25
        ("ethyl-acetate", "H225 H319 H336", "Danger"),
        ("1-decanol", "H319 H412", "Warning"),
        # supplier sheet, n-heptane, 2018-03-06
        ("n-heptane", "H225 H304 H315 H336 H400 H410", "Danger"),
        # notified shares and harmonised entry, acetonitrile
        ("acetonitrile", "H225 H302 H312 H319 H332", "Danger"),
        # chemical directory, pyridine, 2017
        ("pyridine", "H225 H302 H312 H315 H319 H332", "Danger"),
        # copy of a German database, iodine (its signal word corrected)
        ("iodine", "H312 H315 H319 H332 H335 H372 H400", "Danger"),
        # copies of CLP Annex VI, toluene
        ("toluene", "H225 H304 H315 H336 H361d H373", "Danger"),
        # supplier sheet, silver carbonate, 2014
        ("silver-carbonate", "H318 H400 H410", "Danger"),
    ],
)
def test_classifications_quoted_elsewhere(key: str, expected: str, signal_word: str) -> None:
    assert codes(key) == expected.split()
    assert classifications()[key]["signal_word"] == signal_word


@pytest.mark.parametrize(
    ("key", "at_least"),
    [
        # older supplier sheet, in words: swallowed, burns, prolonged inhalation; BF3 gas: H330
        ("boron-trifluoride-diethyl-etherate", "H302 H314 H330 H372"),
        # directory sheet of 2024-04-25
        ("acetic-anhydride", "H226 H302 H314"),
        ("chloroform", "H302 H315 H319 H331 H351 H372"),
        # supplier sheet, triethylamine, 2017-02-24
        ("triethylamine", "H225 H302 H311 H314 H335"),
    ],
)
def test_classifications_hold_at_least_what_was_read(key: str, at_least: str) -> None:
    assert set(at_least.split()) <= set(codes(key))


def test_acute_inhalation_is_not_below_the_entry_read() -> None:
    # a directory sheet of 2024 prints H332 for acetic anhydride, the harmonised minimum
    assert {"H330", "H331"} & set(codes("acetic-anhydride"))
    # methanol is three quarters of the methoxide solution
    assert set(codes("methanol")) <= set(codes("sodium-methoxide-25-in-methanol"))
