"""Every sugar with every acceptor and promoter of the demo shelf: refused, short or right."""

import re
from collections import Counter
from collections.abc import Iterator
from decimal import Decimal
from itertools import pairwise, product
from typing import Any

import pytest

from labplan.base.canonical import canonical_bytes
from labplan.planning.document import plan_document
from labplan.planning.plan import Plan
from labplan.planning.rounding import volume_step_ml
from labplan.planning.steps import amount_text, charge_text
from labplan.planning.values import Charge, Wishes
from tests.corpus import (
    ACCEPTORS,
    ACIDS,
    CATALYTIC,
    ESTERS,
    PROMOTERS,
    SUGARS,
    TRAPS,
    available,
    corpus,
    planned,
    target_of,
)
from tests.shelf import AS_OF, demo_shelf

TO_BASE = {"mg": 1_000, "g": 1_000_000, "mL": 1_000_000, "L": 1_000_000_000}


@pytest.mark.parametrize("acceptor", ACCEPTORS)
def test_the_acceptors_are_those_of_the_bottles(acceptor: str) -> None:
    (bottle,) = (b for b in demo_shelf() if b.code == acceptor)
    for sugar in SUGARS:
        for free in (False, True):
            target = target_of(sugar, acceptor, free=free)
            assert target.acceptor.inchikey == bottle.inchikey
            assert (target.residue_name, target.relation) == (sugar, "1,2-trans")
            assert target.needs_deacetylation is free
            assert target.name, (sugar, acceptor)


@pytest.mark.parametrize("sugar", SUGARS)
def test_what_is_refused_is_what_the_rules_refuse_and_nothing_else(sugar: str) -> None:
    """Free sugars of protected amino acids (base), free acids with a catalytic promoter."""
    for acceptor, free, promoter in product(ACCEPTORS, (False, True), PROMOTERS):
        plan = planned(sugar, acceptor, free, Wishes(promoter), "demo", 2_000.0)
        expected = set()
        if acceptor in ACIDS and promoter in CATALYTIC:
            expected.add("acid_binds_promoter")
        if free and acceptor in (*ACIDS, *ESTERS):
            expected.add("group_does_not_survive_deacetylation")
        codes = {reason.code for reason in plan.reasons}
        if free and acceptor in ACIDS and promoter is None:
            expected.add("acid_binds_promoter")  # of the methods left to choose from
        assert codes == expected, (acceptor, free, promoter)
        assert plan.verdict == ("not_plannable" if expected else "plannable")


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_order_is_refused_short_or_available_with_what_belongs_to_it(sugar: str) -> None:
    seen: Counter[str] = Counter()
    for name, plan in corpus(sugar):
        if plan.route is None:
            seen["refused"] += 1
            assert plan.reasons, name
            assert all(reason.code and len(reason.detail) > 30 for reason in plan.reasons), name
        elif plan.route.shortages:
            seen["short"] += 1
            assert plan.route.stages == ()
            assert all(s.stage and s.role and s.detail for s in plan.route.shortages), name
        else:
            seen["available"] += 1
            assert plan.reasons == ()
            kinds = [stage.kind for stage in plan.route.stages]
            assert kinds in (
                ["coupling"], ["acetylation", "coupling"], ["coupling", "deacetylation"],
                ["acetylation", "coupling", "deacetylation"],
            ), name  # fmt: skip
            assert ("deacetylation" in kinds) is plan.target.needs_deacetylation, name
            assert [stage.number for stage in plan.route.stages] == list(range(1, len(kinds) + 1))
    assert seen["refused"] >= 20
    assert seen["available"] >= 100


def test_every_way_of_acetylating_is_in_the_corpus() -> None:
    """Without peracetates on the shelf each sugar is made by its own method, and used."""
    methods = set()
    for sugar in SUGARS:
        plan = planned(sugar, "OCT-1", False, Wishes(), "no peracetates", 2_000.0)
        assert plan.route is not None
        assert [s.kind for s in plan.route.stages] == ["acetylation", "coupling"], sugar
        methods.add((sugar, plan.route.stages[0].method))
    hot = {sugar for sugar, method in methods if method == "acetylation-sodium-acetate"}
    assert hot == {"D-glucose", "D-galactose", "D-xylose", "lactose"}


@pytest.mark.parametrize("sugar", SUGARS)
def test_every_charge_has_its_step_and_every_step_prints_its_charges(sugar: str) -> None:
    for name, _, stage in available(sugar):
        used = [key for step in stage.steps for key in step.charges]
        assert sorted(used) == sorted(charge.key for charge in stage.charges), name
        by_key = {charge.key: charge for charge in stage.charges}
        for step in stage.steps:
            for key in step.charges:
                assert charge_text(by_key[key]) in step.text, (name, key)
        assert [step.number for step in stage.steps] == list(range(1, len(stage.steps) + 1))


def printed_in_base_units(charge: Charge) -> float:
    """The amount as printed, in micrograms or nanolitres."""
    amount, unit = amount_text(charge).split()
    return float(Decimal(amount) * TO_BASE[unit])


@pytest.mark.parametrize("sugar", SUGARS)
def test_what_is_held_is_what_is_printed(sugar: str) -> None:
    for name, _, stage in available(sugar):
        for charge in stage.charges:
            if charge.bottle is None:
                assert charge.hold_amount == 0, (name, charge.key)
                continue
            base_units = printed_in_base_units(charge)
            if charge.dispense == "volume" and charge.bottle.measured_by == "mass":
                assert charge.bottle.density_g_per_ml is not None
                base_units *= charge.bottle.density_g_per_ml
            if charge.dispense == "mass" and charge.bottle.measured_by == "volume":
                assert charge.bottle.density_g_per_ml is not None
                base_units /= charge.bottle.density_g_per_ml / 1000
            assert charge.hold_amount == pytest.approx(base_units, rel=1e-9, abs=1), (
                name, charge.key,
            )  # fmt: skip


def largest_error(charge: Charge) -> float:
    """How far rounding may take a reacting charge from what was planned, as a fraction."""
    outward = charge.key == "anhydride"
    if charge.dispense == "volume":
        step, amount = volume_step_ml(charge.volume_ml or 0.0), charge.volume_ml
    else:
        step, amount = 1.0, charge.mass_mg
    return step * (1.0 if outward else 0.5) / (amount or 1.0) * 1.05 + 1e-9


@pytest.mark.parametrize("sugar", SUGARS)
def test_equivalents_are_within_the_rounding_step(sugar: str) -> None:
    for name, _, stage in available(sugar):
        by_key = {charge.key: charge for charge in stage.charges}
        reacting = [charge for charge in stage.charges if charge.equivalents_planned is not None]
        assert len(reacting) >= (2 if stage.kind == "deacetylation" else 3)
        for charge in reacting:
            basis = by_key[str(charge.equivalents_of)]
            assert charge.amount_mmol is not None
            assert basis.amount_mmol is not None
            assert charge.equivalents_planned is not None
            equivalents = charge.amount_mmol / basis.amount_mmol
            assert charge.equivalents == pytest.approx(equivalents, rel=1e-9), (name, charge.key)
            off = abs(equivalents / charge.equivalents_planned - 1)
            assert off <= largest_error(charge), (name, charge.key)


@pytest.mark.parametrize("sugar", SUGARS)
def test_masses_balance_within_a_stage_and_from_stage_to_stage(sugar: str) -> None:
    for name, _, stage in available(sugar):
        limiting = next(charge for charge in stage.charges if charge.key == stage.limiting)
        assert stage.scale_mmol == limiting.amount_mmol, name
        theory_mg = stage.scale_mmol * stage.product.molar_mass_g_per_mol
        low, planned_pct, high = stage.yield_pct
        assert 0 < low < planned_pct < high <= 100
        for mass, pct in (
            (stage.expected_low_mg, low),
            (stage.expected_mass_mg, planned_pct),
            (stage.expected_high_mg, high),
        ):
            assert mass == pytest.approx(theory_mg * pct / 100, rel=1e-12), name
        assert stage.expected_mass_mg < stage.gross_mass_mg, name
    for name, plan in corpus(sugar):
        if plan.route is None or not plan.route.stages:
            continue
        for before, after in pairwise(plan.route.stages):
            made = before.expected_mass_mg / before.product.molar_mass_g_per_mol
            taken = next(c for c in after.charges if c.from_stage == before.number)
            if before.kind == "acetylation":  # only the 1,2-trans share of it counts
                share = made_share(plan)
                made *= share
            assert taken.amount_mmol == pytest.approx(made, rel=0.006), name
            assert after.is_provisional
        wanted = float(name.split()[-2]) if name.endswith(" mg") else 2_000.0
        assert plan.route.stages[-1].expected_mass_mg == pytest.approx(wanted, rel=0.006), name


def made_share(plan: Plan) -> float:
    """The planned 1,2-trans share of the peracetate that the stage before gives."""
    assert plan.route is not None
    mixed = [w.detail for w in plan.route.warnings if w.code == "mixed_anomers"]
    if not mixed:
        return 1.0
    found = re.search(r"planned to give ([\d.]+) %", mixed[0])
    assert found is not None
    return float(found.group(1)) / 100


@pytest.mark.parametrize("sugar", SUGARS)
def test_what_couples_gives_glycoside_and_acetic_acid(sugar: str) -> None:
    for name, plan in corpus(sugar):
        target = plan.target
        given = target.donor.monoisotopic_mass_da + target.acceptor.monoisotopic_mass_da
        assert given - 60.02113 == pytest.approx(target.glycoside.monoisotopic_mass_da, abs=1e-4)
        gained = 42.01057 * target.sugar_hydroxyls
        made = target.structure.monoisotopic_mass_da + gained
        assert made == pytest.approx(target.glycoside.monoisotopic_mass_da, abs=1e-3), name


@pytest.mark.parametrize("sugar", SUGARS)
def test_no_trap_stands_in_a_flask(sugar: str) -> None:
    for name, _, stage in available(sugar):
        taken = {c.bottle.code for c in stage.charges if c.bottle and c.group == "reaction"}
        assert not taken & TRAPS, name
        elsewhere = {c.bottle.code for c in stage.charges if c.bottle} & TRAPS
        assert elsewhere <= {"DCM-3"}, name  # good enough to extract with


@pytest.mark.parametrize("sugar", SUGARS)
def test_the_document_of_every_plan_is_canonical_and_whole(sugar: str) -> None:
    for name, plan in corpus(sugar):
        document = plan_document(plan, as_of=AS_OF)
        text = canonical_bytes(document).decode()  # raises on a float
        assert not re.search(r"\bnan\b|\binf\b|infinity", text.lower()), name
        for number in numbers_of(document):
            assert number.is_finite(), name


def numbers_of(value: Any) -> Iterator[Decimal]:
    if isinstance(value, Decimal):
        yield value
    elif isinstance(value, dict):
        for item in value.values():
            yield from numbers_of(item)
    elif isinstance(value, list | tuple):
        for item in value:
            yield from numbers_of(item)
