"""The sentences of every route of the corpus read well, and say what the case asks for."""

import re
from collections.abc import Iterator
from dataclasses import replace

import pytest

from labplan.planning.plan import Plan, make_plan
from labplan.planning.values import Scale, Wishes
from tests.corpus import SOLVENTS, SUGARS, available, corpus, planned, target_of
from tests.shelf import AS_OF, demo_shelf

UNITS = "mg|g|kg|mL|L|mmol|mol|K|h|min|s|cm|mm|mbar|equiv|Hz|Da|ppm"
FAULTS = {
    "two spaces": re.compile(r"  |^\s|\s$"),
    "None or an unfilled name": re.compile(r"\bNone\b|[{}]"),
    "two full stops": re.compile(r"\.\.|\.,|,\.|,,|;\.|:\.|\.;"),
    "a space before a mark": re.compile(r"\s[,.;:)](?!\d)|\(\s"),
    "a small letter after a full stop": re.compile(r"[.!?] [a-z]"),
    "a unit without its space": re.compile(rf"(?<![\w.-])\d+(?:\.\d+)?(?:{UNITS}|%|°)(?!\w)"),
    "a singular with a plural": re.compile(
        r"(?<![\d.,-])1 (?:portions|times|groups|acids|hours|steps|stages|equivalents)\b"
    ),
    "an open plural": re.compile(r"\w\(s\)"),
    "a figure that is none": re.compile(r"\b(?:nan|inf)\b|(?<![\w-])-\d"),
}


def faults_in(text: str) -> list[str]:
    found = [name for name, pattern in FAULTS.items() if pattern.search(text)]
    for opening, closing in ("()", "[]"):
        if text.count(opening) != text.count(closing):
            found.append(f"unbalanced {opening}{closing}")
    return found


def test_the_faults_are_seen_where_they_are() -> None:
    """The patterns above find what they are for, and leave good sentences alone."""
    bad = {
        "Stir  it.": "two spaces",
        "Add None of it.": "None or an unfilled name",
        "Stir it..": "two full stops",
        "Stir it , then": "a space before a mark",
        "Stir. then filter.": "a small letter after a full stop",
        "Add 5mL of it.": "a unit without its space",
        "In 1 portions.": "a singular with a plural",
        "The group(s).": "an open plural",
        "Add (5 mL.": "unbalanced ()",
        "Add -5 mL.": "a figure that is none",
    }
    for text, fault in bad.items():
        assert fault in faults_in(text), text
    good = "Add 3.51 mL of 1,2,3-tri-O-acetyl-beta-D-X (bottle A-1), 5 % w/w, at 0 °C. Stir 1 h."
    assert faults_in(good) == []


def sentences_of(plan: Plan) -> Iterator[tuple[str, str]]:
    """Every text a reader meets, with where it stands."""
    for reason in plan.reasons:
        yield "reason", reason.detail
    for route in plan.routes:
        yield from (("why", line) for line in route.why)
        yield from (("warning", warning.detail) for warning in route.warnings)
        yield from (("shortage", shortage.detail) for shortage in route.shortages)
        yield from (("passed over", passed.reason) for passed in route.passed_over)
        for stage in route.stages:
            yield "method", stage.method_name
            yield "product", stage.product_name
            for step in stage.steps:
                yield f"{stage.kind} {step.title}", step.text
                yield f"title of {step.title}", step.title
                if step.watch:
                    yield f"watch of {step.title}", step.watch
                yield f"pause of {step.title}", step.pause


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_sentence_reads_well(sugar: str) -> None:
    for name, plan in corpus(sugar):
        for where, text in sentences_of(plan):
            assert faults_in(text) == [], (name, where, text)
            if where in {"reason", "why", "warning"}:
                assert text[0].isupper() or text[0].isdigit() or text[1] in "-(", (name, text)
                assert text.endswith("."), (name, where, text)


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_step_is_a_text_of_whole_sentences_that_fits_a_card(sugar: str) -> None:
    for name, _, stage in available(sugar):
        for step in stage.steps:
            assert 30 <= len(step.text) <= 900, (name, step.title, len(step.text))
            assert step.text[0].isupper(), (name, step.text)
            assert step.text.endswith("."), (name, step.text)
            assert not step.watch.endswith("."), (name, step.watch)
            assert step.pause, (name, step.title)


def steps_of(plan: Plan, kind: str) -> dict[str, str]:
    assert plan.route is not None
    (stage,) = (stage for stage in plan.route.stages if stage.kind == kind)
    return {step.title: step.text for step in stage.steps}


@pytest.mark.parametrize(("acceptor", "equiv", "pause"), [
    ("BRE-1", 0.1, "do not stop"), ("OCT-1", 0.4, "may stir overnight"),
])  # fmt: skip
def test_a_haloalkyl_gets_little_methoxide_and_not_for_long(
    acceptor: str, equiv: float, pause: str
) -> None:
    """At most 0.1 equiv and 2 h beside a bromide; 0.1 for each of four acetates without one."""
    plan = planned("D-glucose", acceptor, True, Wishes(), "demo", 2_000.0)
    assert plan.route is not None
    stage = plan.route.stages[-1]
    base = next(charge for charge in stage.charges if charge.key == "base")
    assert base.equivalents_planned == pytest.approx(equiv)
    step = next(step for step in stage.steps if step.title == "Take off the acetates")
    assert step.pause.startswith(pause)
    assert ("for at most 2 h" in step.text) is (acceptor == "BRE-1")
    assert ("add a tenth of the base again" in step.watch) is (acceptor == "OCT-1")


@pytest.mark.parametrize("sugar", SUGARS)
def test_a_slurry_is_said_where_the_bicarbonate_does_not_dissolve(sugar: str) -> None:
    seen = set()
    for name, _, stage in available(sugar):
        if stage.kind != "coupling" or "quench_water" not in stage.steps[3].charges:
            continue
        assert stage.quench is not None
        water = next(charge for charge in stage.charges if charge.key == "quench_water")
        text = " ".join(step.text for step in stage.steps if step.title == "Make the quench ready")
        if "plastic" in text:
            continue  # a free acid: water alone, the bicarbonate for the water layers
        is_slurry = (water.volume_ml or 0.0) < stage.quench.clear_solution_ml
        assert ("it stays a slurry" in text) is is_slurry, name
        seen.add(is_slurry)
    assert seen == {True, False}


@pytest.mark.parametrize("solvent", SOLVENTS)
def test_a_solvent_that_mixes_with_water_is_taken_off_before_the_extraction(solvent: str) -> None:
    wishes = Wishes("boron-trifluoride-diethyl-etherate", solvent)
    steps = steps_of(planned("D-glucose", "OCT-1", True, wishes, "demo", 2_000.0), "coupling")
    extract = steps["Extract"]
    assert ("Evaporate the acetonitrile" in extract) is (solvent == "acetonitrile")
    assert ("Separate the layers" in extract) is (solvent != "acetonitrile")
    assert ("toluene from 38 mbar on" in steps["Dry and concentrate"]) is (solvent == "toluene")


def test_bottles_that_hold_too_little_of_the_peracetate_are_named() -> None:
    """When it is made instead, the sheet says which bottle was looked at."""
    shelf = tuple(replace(b, usable=100.0) if b.code == "GAL-1" else b for b in demo_shelf())
    target = target_of("D-galactose", "OCT-1", free=False)
    plan = make_plan(target, Scale(product_mass_mg=2_000.0), shelf, as_of=AS_OF)
    assert plan.route is not None
    assert [stage.kind for stage in plan.route.stages] == ["acetylation", "coupling"]
    said = {(p.bottle, p.role): p.reason for p in plan.route.passed_over}
    assert said["GAL-1", "donor"].startswith("holds 100 mg that can be used")
