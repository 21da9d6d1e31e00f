"""The route on a shelf: amounts by hand, bottles by rule, refusals by veto."""

import re
from dataclasses import replace
from datetime import date, timedelta

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from labplan.base.canonical import canonical_bytes
from labplan.chemistry.coupling import read_target
from labplan.planning import rounding
from labplan.planning.document import plan_document
from labplan.planning.plan import Plan, make_plan
from labplan.planning.steps import amount_text, charge_text
from labplan.planning.values import Charge, Scale, ShelfBottle, Wishes
from tests.shelf import AS_OF, demo_shelf
from tests.targets import OCTYL_GLUCOSIDE

TWO_GRAMS = Scale(product_mass_mg=2000.0)


def plan(
    shelf: tuple[ShelfBottle, ...], scale: Scale = TWO_GRAMS, smiles: str = OCTYL_GLUCOSIDE
) -> Plan:
    return make_plan(read_target(smiles), scale, shelf, as_of=AS_OF)


def charges(planned: Plan) -> dict[str, Charge]:
    assert planned.route is not None
    return {charge.key: charge for stage in planned.route.stages for charge in stage.charges}


def without(shelf: tuple[ShelfBottle, ...], *codes: str) -> tuple[ShelfBottle, ...]:
    return tuple(bottle for bottle in shelf if bottle.code not in codes)


def changed(shelf: tuple[ShelfBottle, ...], code: str, **values: object) -> tuple[ShelfBottle, ...]:
    return tuple(replace(b, **values) if b.code == code else b for b in shelf)  # type: ignore[arg-type]


def test_every_charge_of_the_demo_is_as_worked_by_hand() -> None:
    """2.000 g of octyl 2,3,4,6-tetra-O-acetyl-beta-D-glucopyranoside, 460.520 g/mol.

    Back: 2000 / 460.520 = 4.34292 mmol of product; / 0.60 = 7.23820 mmol of donor.
    donor     7.23820 x 390.341 / 0.990 = 2853.92 -> 2854 mg; n = 2854 x 0.99 / 390.341 = 7.23842
    acceptor  1.5 x 7.23842 = 10.85762; x 130.231 = 1413.999 mg (99.0 % by area does not divide);
              / 0.8262 / 1000 = 1.71145 -> 1.71 mL = 1412.80 mg; n = 10.84842; 1.499 equiv
    promoter  3.0 x 7.23842 = 21.71525; x 141.928 / 0.97333 = 3166.47 mg; / 1.125 = 2.81464
              -> 2.81 mL = 3161.25 mg; x 0.97333 / 141.928 = 21.6794 mmol; 2.995 equiv
    solvent   7.23842 / 0.10 = 72.384 -> 73 mL, outward
    sieves    73 x 0.05 = 3.65 g
    quench    3 x 21.6794 + 7.23842 = 72.2766 mmol; + 10 % = 79.504; x 84.006 = 6678.8 -> 6.68 g
              carbon dioxide 72.2766 x 24.465 / 1000 = 1.768 L
    """
    found = charges(plan(demo_shelf()))
    donor, acceptor, promoter = found["donor"], found["acceptor"], found["promoter"]
    assert (donor.bottle.code, donor.mass_mg) == ("GPA-1", 2854.0)  # type: ignore[union-attr]
    assert donor.amount_mmol == pytest.approx(7.23842, abs=5e-5)
    assert (acceptor.bottle.code, acceptor.volume_ml) == ("OCT-1", 1.71)  # type: ignore[union-attr]
    assert acceptor.amount_mmol == pytest.approx(10.84842, abs=5e-5)
    assert acceptor.equivalents == pytest.approx(1.4987, abs=1e-4)
    assert (promoter.bottle.code, promoter.volume_ml) == ("BFE-1", 2.81)  # type: ignore[union-attr]
    assert promoter.amount_mmol == pytest.approx(21.6794, abs=3e-4)
    assert promoter.equivalents == pytest.approx(2.9950, abs=1e-4)
    assert (found["solvent"].bottle.code, found["solvent"].volume_ml) == ("DCM-1", 73.0)  # type: ignore[union-attr]
    assert found["sieves"].mass_mg == 3650.0
    assert found["quench_base"].mass_mg == 6680.0


def test_what_is_held_is_what_is_printed() -> None:
    found = charges(plan(demo_shelf()))
    assert found["donor"].hold_amount == 2_854_000  # micrograms
    assert found["acceptor"].hold_amount == 1_710_000  # nanolitres
    assert amount_text(found["donor"]) == "2.854 g"
    assert amount_text(found["acceptor"]) == "1.71 mL"


def test_water_is_summed_against_promoter_and_donor() -> None:
    """DCM 73 mL x 1.3266 x 18 ppm / 18.015 = 0.09676; octanol 1412.8 mg x 120 ppm: 0.00941 mmol."""
    planned = plan(demo_shelf())
    assert planned.route is not None
    water = planned.route.stages[0].water
    assert dict(water.lines)["solvent"] == pytest.approx(0.09676, abs=1e-5)
    assert dict(water.lines)["acceptor"] == pytest.approx(0.00941, abs=1e-5)
    assert water.promoter_share_pct == pytest.approx(0.490, abs=1e-3)
    assert water.donor_share_pct == pytest.approx(1.467, abs=1e-3)


def test_scale_by_acceptor_starts_from_its_equivalents() -> None:
    found = charges(plan(demo_shelf(), Scale(acceptor_amount_mmol=15.0)))
    # 15 / 1.5 = 10 mmol donor: 10 x 390.341 / 0.99 = 3942.8 -> 3943 mg
    assert found["donor"].mass_mg == 3943.0
    assert found["acceptor"].amount_mmol == pytest.approx(15.0, abs=0.04)


def test_trap_bottles_are_passed_over_with_their_reason() -> None:
    planned = plan(demo_shelf())
    assert planned.route is not None
    said = {(p.bottle, p.role): p.reason for p in planned.route.passed_over}
    assert said["DCM-3", "solvent"] == (
        "is stabilised with ethanol, an alcohol that takes the donor"
    )
    assert said["BFE-2", "promoter"] == "is quarantined"
    assert said["MS-2", "drying agent"].startswith("is not activated")


def test_the_alcohol_stabilised_solvent_still_serves_the_work_up() -> None:
    assert charges(plan(demo_shelf()))["extraction_solvent"].bottle.code == "DCM-3"  # type: ignore[union-attr]


@pytest.mark.parametrize(
    ("values", "reason"),
    [
        ({"expires_on": AS_OF - timedelta(days=1)}, "expired on 2026-11-30"),
        ({"status": "quarantined"}, "is quarantined"),
        ({"usable": 5.0}, "holds 5 mL that can be used, 73 mL is needed"),
        ({"stabiliser_state": "unknown"}, "its stabiliser is not known"),
        ({"water_ppm": 300.0}, "holds 300 ppm of water; at most 100 ppm here"),
    ],
)
def test_a_solvent_that_does_not_fit_is_passed_over(values: dict[str, object], reason: str) -> None:
    planned = plan(changed(demo_shelf(), "DCM-1", **values))
    assert planned.route is not None
    said = {(p.bottle, p.role): p.reason for p in planned.route.passed_over}
    assert said["DCM-1", "solvent"].startswith(reason)
    assert charges(planned)["solvent"].bottle.code == "DCM-2"  # type: ignore[union-attr]


def test_the_expiry_date_itself_is_still_valid() -> None:
    planned = plan(changed(demo_shelf(), "DCM-1", expires_on=AS_OF))
    assert charges(planned)["solvent"].bottle.code == "DCM-1"  # type: ignore[union-attr]


def test_an_old_reading_of_an_open_bottle_is_unknown_and_said() -> None:
    old = AS_OF - timedelta(days=31)
    shelf = without(changed(demo_shelf(), "DCM-1", water_read_on=old), "DCM-2")
    planned = plan(shelf)
    assert planned.route is not None
    assert [w.code for w in planned.route.warnings] == ["water_unknown"]
    assert "DCM-1" in planned.route.warnings[0].detail


def test_pure_donor_before_a_mix_of_anomers_and_the_mix_counts_its_share() -> None:
    shelf = demo_shelf()
    assert charges(plan(shelf))["donor"].bottle.code == "GPA-1"  # type: ignore[union-attr]
    mixed = charges(plan(without(shelf, "GPA-1")))["donor"]
    # 7.23820 x 390.341 / (0.97 x 0.78) = 3734.3 mg
    assert (mixed.bottle.code, mixed.mass_mg) == ("GPA-2", 3734.0)  # type: ignore[union-attr]


def test_all_shortages_are_listed_at_once() -> None:
    planned = plan(without(demo_shelf(), "BFE-1", "OCT-1", "SIL-1"))
    assert planned.route is not None
    assert planned.verdict == "plannable"
    assert not planned.route.is_available
    assert [s.role for s in planned.route.shortages] == ["acceptor", "promoter", "stationary phase"]
    assert "BFE-2 is quarantined" in planned.route.shortages[1].detail


def test_one_bottle_used_twice_counts_once() -> None:
    """One bottle of dichloromethane: reaction 73, syringe 3, rinse 14.6 and extraction 110 mL."""
    shelf = without(demo_shelf(), "DCM-2", "DCM-3")
    enough, short = changed(shelf, "DCM-1", usable=200.6), changed(shelf, "DCM-1", usable=200.5)
    assert plan(enough).route.is_available  # type: ignore[union-attr]
    assert [s.role for s in plan(short).route.shortages] == ["rinse"]  # type: ignore[union-attr]


def test_without_activated_sieves_the_plan_stands_with_a_warning() -> None:
    planned = plan(without(demo_shelf(), "MS-1"))
    assert planned.route is not None
    assert "sieves" not in charges(planned)
    assert "no_activated_sieves" in [w.code for w in planned.route.warnings]
    assert all("sieves" not in step.text for step in planned.route.stages[0].steps[:6])


@pytest.mark.parametrize(
    ("scale", "code"),
    [(Scale(product_mass_mg=1.0), "below_least_weighable"),
     (Scale(product_mass_mg=1_000_000.0), "above_one_flask")],
)  # fmt: skip
def test_a_scale_that_cannot_be_run_is_refused(scale: Scale, code: str) -> None:
    everything = tuple(replace(bottle, usable=1e12) for bottle in demo_shelf())
    planned = plan(everything, scale)
    assert planned.verdict == "not_plannable"
    assert [reason.code for reason in planned.reasons] == [code]


def test_a_large_run_asks_for_a_review() -> None:
    everything = tuple(replace(bottle, usable=1e12) for bottle in demo_shelf())
    planned = plan(everything, Scale(product_mass_mg=20_000.0))
    assert planned.route is not None
    assert "scale_review" in [w.code for w in planned.route.warnings]


GLUCOSIDE = "CC(=O)OC[C@H]1O[C@@H](O{})[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"


@pytest.mark.parametrize(
    ("smiles", "code"),
    [
        (GLUCOSIDE.format("CC").replace("[C@@H](OCC)", "[C@H](OCC)"), "wrong_relation_1_2_cis"),
        ("CC(=O)OC[C@H]1O[C@@H](OCC)[C@H](O)[C@@H](O)[C@@H]1O", "partly_acetylated"),
        (GLUCOSIDE.format("C(C)(C)CC"), "acceptor_not_planned"),
        (GLUCOSIDE.format("c2ccccc2"), "acceptor_not_planned"),
        (GLUCOSIDE.format("CCO"), "several_acceptor_hydroxyls"),
        (GLUCOSIDE.format("CCNC(=O)OC(C)(C)C"), "group_does_not_survive"),
        (GLUCOSIDE.format("CCN"), "group_does_not_survive"),
        (GLUCOSIDE.format("C[C@H]2COC(C)(C)O2"), "group_does_not_survive"),
    ],
)
def test_what_peracetate_coupling_cannot_do_is_vetoed(smiles: str, code: str) -> None:
    planned = plan(demo_shelf(), smiles=smiles)
    assert planned.verdict == "not_plannable"
    assert code in [reason.code for reason in planned.reasons]
    assert planned.route is None


FREE_GLUCOSIDE = "OC[C@H]1O[C@@H](O{})[C@H](O)[C@@H](O)[C@@H]1O"


@pytest.mark.parametrize(
    ("aglycone", "reason"),
    [
        ("CCCOC(C)=O", "Methoxide takes an acyl group off"),
        ("CCCOC(=O)c2ccccc2", "Methoxide takes an acyl group off"),
        ("CCCCC(=O)OCC", "Methoxide takes an acyl group off"),
        ("CCCCC(=O)OC(C)C", "Methoxide takes an acyl group off"),
        ("CCN2C(=O)c3ccccc3C2=O", "Methoxide opens the phthalimide"),
        ("CCNC(=O)C(F)(F)F", "Methoxide takes off the trifluoroacetyl"),
        ("CCOC(=O)OCC", "Methoxide opens the carbonate"),
    ],
)
def test_what_methoxide_takes_is_refused_free_and_planned_acetylated(
    aglycone: str, reason: str
) -> None:
    planned = plan(demo_shelf(), smiles=FREE_GLUCOSIDE.format(aglycone))
    assert planned.verdict == "not_plannable"
    assert [r.code for r in planned.reasons] == ["group_does_not_survive_deacetylation"]
    assert planned.reasons[0].detail.startswith(reason)
    assert plan(demo_shelf(), smiles=GLUCOSIDE.format(aglycone)).verdict == "plannable"


@pytest.mark.parametrize("aglycone", ["CCCCC(=O)OC", "CCCCCCCC", "CCNC(C)=O"])
def test_a_methyl_ester_and_an_acetamide_stand_methoxide(aglycone: str) -> None:
    assert plan(demo_shelf(), smiles=FREE_GLUCOSIDE.format(aglycone)).verdict == "plannable"


def test_a_refused_cis_target_names_what_does_it_elsewhere() -> None:
    alpha = GLUCOSIDE.format("CC").replace("[C@@H](OCC)", "[C@H](OCC)")
    (reason,) = plan(demo_shelf(), smiles=alpha).reasons
    assert "ether-protected glucosyl donor" in reason.detail


def test_an_azide_is_worked_behind_a_shield_and_never_stands() -> None:
    azide = GLUCOSIDE.format("CCN=[N+]=[N-]")
    planned = plan(demo_shelf(), Scale(product_mass_mg=1000.0), azide)
    (stage,) = planned.route.stages  # type: ignore[union-attr]
    text = " ".join(step.text for step in stage.steps)
    assert "behind a shield" in text
    assert "Azide waste, in a container of its own" in text
    assert "2-azidoethanol, solution, 1 mol/L in toluene (bottle AZE-1)" in text
    concentrate = next(step for step in stage.steps if step.title == "Dry and concentrate")
    assert concentrate.pause == "do not stop"
    assert "30 °C" in concentrate.text
    hazards = [h["name"] for h in plan_document(planned, as_of=AS_OF)["hazards"]]
    assert "Toluene" in hazards


def test_without_gluconate_gel_in_date_bf3_is_a_stop() -> None:
    planned = plan(changed(demo_shelf(), "CGG-1", expires_on=AS_OF - timedelta(days=1)))
    assert [w.code for w in planned.route.warnings if w.severity == "stop"] == [  # type: ignore[union-attr]
        "no_gluconate_gel"
    ]


def test_a_wished_promoter_is_taken_and_an_unknown_one_is_refused() -> None:
    shelf = demo_shelf()
    target = read_target(OCTYL_GLUCOSIDE)
    wished = make_plan(
        target, TWO_GRAMS, shelf, as_of=AS_OF, wishes=Wishes(promoter="indium-tribromide")
    )
    found = charges(wished)
    # at 55 %: 2000 / 460.52 / 0.55 = 7.8963 mmol x 0.5 x 354.53 / 0.99 = 1413.9 mg
    assert (found["promoter"].bottle.code, found["promoter"].mass_mg) == ("INB-1", 1414.0)  # type: ignore[union-attr]
    assert "acetyl_transfer" in [w.code for w in wished.route.warnings]  # type: ignore[union-attr]
    unknown = make_plan(target, TWO_GRAMS, shelf, as_of=AS_OF, wishes=Wishes(promoter="iodine"))
    assert [reason.code for reason in unknown.reasons] == ["no_such_method"]


def test_bismuth_triflate_counts_its_hydrate_water_in_the_weighing() -> None:
    wished = make_plan(
        read_target(OCTYL_GLUCOSIDE), TWO_GRAMS, demo_shelf(), as_of=AS_OF,
        wishes=Wishes(promoter="bismuth-triflate"),
    )  # fmt: skip
    promoter = charges(wished)["promoter"]
    # at 45 %: 9.6510 mmol x 0.1 x (656.19 + 4 x 18.015) / 0.98 = 717.2 mg
    assert promoter.mass_mg == 717.0
    assert "sieves" not in charges(wished)


def test_all_routes_are_kept_best_first() -> None:
    planned = plan(demo_shelf())
    assert [r.method for r in planned.routes] == [
        "peracetate-bf3", "peracetate-inbr3", "peracetate-bismuth-triflate",
    ]  # fmt: skip
    without_bf3 = plan(without(demo_shelf(), "BFE-1"))
    assert without_bf3.routes[0].method == "peracetate-inbr3"
    assert without_bf3.routes[0].warnings[0].code == "second_choice"
    assert "boron trifluoride" in without_bf3.routes[0].warnings[0].detail
    assert without_bf3.routes[-1].shortages


@given(st.permutations(range(len(demo_shelf()))))
@settings(max_examples=25, deadline=None)
def test_the_order_of_the_shelf_does_not_change_a_byte(order: list[int]) -> None:
    shelf = demo_shelf()
    shuffled = tuple(shelf[index] for index in order)
    assert document_of(plan(shuffled)) == document_of(plan(shelf))


def document_of(planned: Plan) -> bytes:
    return canonical_bytes(plan_document(planned, as_of=AS_OF))


@given(
    st.floats(min_value=60, max_value=15_000, allow_nan=False),
    st.sampled_from(["CCCCCCCC", "CCCCCCCCCC", "CC=C", "CCCC=C", "Cc2ccccc2"]),
)
@settings(max_examples=60, deadline=None)
def test_equivalents_are_met_within_the_step_of_the_syringe(mass_mg: float, aglycone: str) -> None:
    planned = plan(demo_shelf(), Scale(product_mass_mg=mass_mg), GLUCOSIDE.format(aglycone))
    assert planned.route is not None
    if not planned.route.is_available:
        assert planned.route.shortages
        return
    for charge in charges(planned).values():
        if charge.equivalents is None or charge.volume_ml is None:
            continue
        step = rounding.volume_step_ml(charge.volume_ml)
        off = abs(charge.equivalents / charge.equivalents_planned - 1)  # type: ignore[operator]
        least_exact_ml = charge.volume_ml - 0.5 * step  # what was rounded up to the volume
        assert off <= 0.5 * step / least_exact_ml * 1.001 + 1e-9


@given(st.floats(min_value=1e-3, max_value=1e6), st.sampled_from([0.01, 0.1, 1.0, 10.0]))
def test_rounding_goes_to_the_nearest_step_or_outward(value: float, step: float) -> None:
    nearest = rounding.round_to_step(value, step)
    outward = rounding.round_to_step(value, step, outward=True)
    assert abs(nearest - value) <= step / 2 + 1e-6
    assert value - 1e-6 <= outward < value + step + 1e-6


def test_every_charge_has_its_step_and_every_step_its_charge() -> None:
    for shelf in (demo_shelf(), without(demo_shelf(), "MS-1")):
        (stage,) = plan(shelf).route.stages  # type: ignore[union-attr]
        used = [key for step in stage.steps for key in step.charges]
        assert sorted(used) == sorted(charge.key for charge in stage.charges)
        for step in stage.steps:
            for key in step.charges:
                charge = next(c for c in stage.charges if c.key == key)
                assert charge_text(charge) in step.text


def test_steps_name_no_amount_that_is_not_in_the_table() -> None:
    (stage,) = plan(demo_shelf()).route.stages  # type: ignore[union-attr]
    assert stage.quench is not None
    allowed = {amount_text(charge) for charge in stage.charges}
    # vessels, the funnel, the bed of the column, the gas, what a clear quench would take
    allowed |= {f"{stage.vessel_ml} mL", f"{stage.quench.vessel_ml} mL", "500 mL", "304 mL"}
    allowed |= {"1.8 L", f"{stage.quench.clear_solution_ml:.0f} mL"}
    allowed |= {"3.804 g", "2.000 g", "1.667 g", "2.333 g"}
    named = {
        amount
        for step in stage.steps
        for amount in re.findall(r"\b\d[\d.]* (?:mg|g|mL|L)\b", step.text)
    }
    assert named <= allowed


def test_the_quench_is_ready_before_the_promoter_and_the_reaction_goes_into_it() -> None:
    (stage,) = plan(demo_shelf()).route.stages  # type: ignore[union-attr]
    order = [key for step in stage.steps for key in step.charges]
    assert order.index("sieves") < order.index("quench_base") < order.index("promoter")
    assert max(map(order.index, ("donor", "acceptor", "solvent"))) < order.index("promoter")
    quench = next(step for step in stage.steps if step.title == "Quench")
    assert "INTO the stirred, open quench" in quench.text
    assert "never in a closed vessel" in quench.text


def test_the_date_is_in_the_document_and_no_float_is() -> None:
    document = plan_document(plan(demo_shelf()), as_of=date(2026, 12, 1))
    assert document["as_of"] == "2026-12-01"
    canonical_bytes(document)  # raises on a float


def test_a_shortage_says_the_largest_amount_with_its_unit() -> None:
    planned = plan(changed(demo_shelf(), "OCT-1", usable=1.2))
    (short,) = planned.route.shortages  # type: ignore[union-attr]
    assert (short.role, short.largest_usable) == ("acceptor", "1.2 mL")


def test_the_water_of_a_hydrated_promoter_is_counted() -> None:
    """0.0965 x 10 mmol of Bi(OTf)3.4H2O bring 3.86 mmol of water: 40 % of the donor."""
    wished = make_plan(
        read_target(OCTYL_GLUCOSIDE), TWO_GRAMS, demo_shelf(), as_of=AS_OF,
        wishes=Wishes(promoter="bismuth-triflate"),
    )  # fmt: skip
    water = wished.route.stages[0].water  # type: ignore[union-attr]
    assert water is not None
    assert dict(water.lines)["promoter"] == pytest.approx(3.86, abs=0.01)
    assert water.donor_share_pct > 40
    assert "water_takes_donor" in [w.code for w in wished.route.warnings]  # type: ignore[union-attr]


@pytest.mark.parametrize(
    ("promoter", "halide"),
    [("boron-trifluoride-diethyl-etherate", "glycosyl fluoride"),
     ("indium-tribromide", "glycosyl bromide"), ("bismuth-triflate", None)],
)  # fmt: skip
def test_only_the_promoters_own_halide_is_expected(promoter: str, halide: str | None) -> None:
    planned = make_plan(
        read_target(OCTYL_GLUCOSIDE), TWO_GRAMS, demo_shelf(), as_of=AS_OF,
        wishes=Wishes(promoter=promoter),
    )  # fmt: skip
    names = [s.name for s in planned.expectations.side_products]  # type: ignore[union-attr]
    assert [name for name in names if name.startswith("glycosyl")] == ([halide] if halide else [])


def test_a_long_chain_glycoside_is_not_taken_up_in_water() -> None:
    free = "CCCCCCCCO[C@@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O"
    planned = plan(demo_shelf(), Scale(product_mass_mg=1000.0), free)
    last = planned.route.stages[-1]  # type: ignore[union-attr]
    assert "water" not in {charge.key for charge in last.charges}
    assert all("take up in water" not in step.text for step in last.steps)
