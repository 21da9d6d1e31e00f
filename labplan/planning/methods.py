"""Methods are data (fixtures/methods.json). What does not fit is a veto, never a low score."""

from typing import Any

from labplan import datafiles
from labplan.chemistry.coupling import Target
from labplan.planning.survival import endangered, killed
from labplan.planning.values import Reason, RouteWarning, Wishes

Method = dict[str, Any]


def methods_of(kind: str) -> list[Method]:
    rows = [row for row in datafiles.table("methods")["methods"] if row["kind"] == kind]
    return sorted(rows, key=lambda row: (row.get("rank", 0), row["key"]))


def method_row(key: str) -> Method:
    """The row of a method that a stage names."""
    rows: list[Method] = datafiles.table("methods")["methods"]
    return next(row for row in rows if row["key"] == key)


def acetylation_for(target: Target) -> Method | None:
    """The way that gives the wanted anomer of this sugar, or None."""
    if target.residue is None:
        return None
    return next((m for m in methods_of("acetylation") if target.residue.key in m["residues"]), None)


def deacetylation_method() -> Method:
    return methods_of("deacetylation")[0]


def fitting_couplings(target: Target, wishes: Wishes) -> tuple[list[Method], tuple[Reason, ...]]:
    """Methods that fit target and wishes, best first; or none, with the reasons against each."""
    asked = [m for m in methods_of("coupling") if _is_wished(m, wishes)]
    if not asked:
        return [], (_unknown_wish(wishes),)
    fitting: list[Method] = []
    reasons: list[Reason] = []
    for method in asked:
        against = reasons_against(target, method)
        if against:
            reasons += against
        else:
            fitting.append(method)
    return fitting, () if fitting else tuple(dict.fromkeys(reasons))


def _is_wished(method: Method, wishes: Wishes) -> bool:
    if wishes.promoter is not None and method["promoter"]["substance"] != wishes.promoter:
        return False
    solvents = {solvent["substance"] for solvent in method["solvents"]}
    return wishes.solvent is None or wishes.solvent in solvents


def _unknown_wish(wishes: Wishes) -> Reason:
    known = "; ".join(
        f"{m['promoter']['substance']} in {', '.join(s['substance'] for s in m['solvents'])}"
        for m in methods_of("coupling")
    )
    asked = " in ".join(wish for wish in (wishes.promoter, wishes.solvent) if wish)
    return Reason(
        "no_such_method", f"No coupling of a peracetate is known here with {asked}. Known: {known}."
    )


def solvent_of(method: Method, wishes: Wishes) -> dict[str, object]:
    """The wished solvent of a method, else its default."""
    rows: list[dict[str, object]] = method["solvents"]
    if wishes.solvent is not None:
        return next(row for row in rows if row["substance"] == wishes.solvent)
    return next(row for row in rows if row["default"])


def reasons_against(target: Target, method: Method) -> tuple[Reason, ...]:
    """Why this coupling, or what must follow it, cannot give the target."""
    return (
        *_sugar_reasons(target, method),
        *_relation_reasons(target),
        *_protection_reasons(target),
        *_acceptor_reasons(target, method),
        *_deacetylation_reasons(target),
    )


def group_cautions(target: Target, method: Method) -> tuple[RouteWarning, ...]:
    """Groups that want care in the coupling or in the deacetylation that follows."""
    conditions = [method["promoter"]["survival"]]
    if target.needs_deacetylation:
        conditions.append(deacetylation_method()["survival"])
    found = [
        RouteWarning(f"{fate.group.replace(' ', '_')}_present", "caution", _sentence(fate.reason))
        for condition in conditions
        for fate in endangered(condition, target.acceptor_groups)
    ]
    return tuple(dict.fromkeys(found))


def _sentence(reason: str) -> str:
    return f"{reason[0].upper()}{reason[1:]}."


def later_cautions(target: Target) -> tuple[RouteWarning, ...]:
    """What must not be done to this product later, by what it carries."""
    fates = [
        (condition, fate)
        for condition in ("iodine or N-iodosuccinimide", "hydrogenolysis")
        for fate in killed(condition, target.acceptor_groups)
    ]
    return tuple(
        RouteWarning(
            "refused_for_this_product",
            "note",
            f"No {condition} on this product or in its coupling: {fate.reason}.",
        )
        for condition, fate in fates
    )


def _sugar_reasons(target: Target, method: Method) -> tuple[Reason, ...]:
    if target.c2_substituent != "O":
        return ()  # said by the 1,2-relation
    if target.residue is None:
        return (
            Reason(
                "residue_unknown",
                "The sugar is not in the table of residues, so its peracetate cannot be named.",
            ),
        )
    if target.residue.key not in method["residues"]:
        planned = ", ".join(sorted(method["residues"]))
        return (
            Reason(
                "residue_not_planned",
                f"{target.residue.name} is not among the sugars this method covers: {planned}.",
            ),
        )
    return ()


# What does it elsewhere, named without planning it.
_OTHER_WAYS = {
    "d-mannose": "a 4,6-benzylidene mannosyl sulfoxide or trichloroacetimidate",
    "l-rhamnose": "a rhamnosyl donor without an acyl group at C-2, or by inversion",
    "l-fucose": "a benzyl-protected fucosyl donor (bromide, thioglycoside or imidate)",
    "d-galactose": "an ether-protected or 4,6-silylene galactosyl donor",
    "d-glucose": "an ether-protected glucosyl donor",
    "lactose": "an ether-protected lactosyl donor",
}


def _relation_reasons(target: Target) -> tuple[Reason, ...]:
    """Only an acyl group at C-2 promises a relation, and it promises 1,2-trans."""
    if target.c2_substituent != "O":
        return (
            Reason(
                "no_participating_group",
                "C-2 carries no acyloxy group, so no 1,2-relation is promised; this needs a "
                "donor of another type.",
            ),
        )
    if target.relation != "1,2-cis":
        return ()
    key = target.residue.key if target.residue else ""
    other = _OTHER_WAYS.get(key, "a donor without an acyl group at C-2")
    sugar = target.residue_name or "this sugar"
    return (
        Reason(
            "wrong_relation_1_2_cis",
            f"The target is the {target.anomer or ''} glycoside of {sugar}, which is 1,2-cis; the "
            "acetate at C-2 directs the alcohol to the 1,2-trans side. "
            f"Elsewhere this is made with {other}.",
        ),
    )


def _protection_reasons(target: Target) -> tuple[Reason, ...]:
    found = []
    if target.sugar_hydroxyls and target.sugar_acetates:
        found.append(
            Reason(
                "partly_acetylated",
                f"The sugar of the target has {target.sugar_hydroxyls} free and "
                f"{target.sugar_acetates} acetylated hydroxyl groups. Ask for the per-O-acetate "
                "or for the free glycoside.",
            )
        )
    if target.other_sugar_groups:
        found.append(
            Reason(
                "not_acetates",
                f"The sugar carries another group than acetyl ({target.other_sugar_groups} found); "
                "the donor would not be a peracetate.",
            )
        )
    return tuple(found)


def _kind_of_alcohol(hydroxyl: str) -> str:
    return {"phenol": "a phenol", "acid": "a carboxylic acid"}.get(
        hydroxyl, f"a {hydroxyl} alcohol"
    )


def _acceptor_reasons(target: Target, method: Method) -> tuple[Reason, ...]:
    found = []
    if target.acceptor_oh not in method["acceptor_oh"]:
        allowed = " and ".join(method["acceptor_oh"])
        found.append(
            Reason(
                "acceptor_not_planned",
                f"The acceptor is {_kind_of_alcohol(target.acceptor_oh)}; {method['name']} is "
                f"planned for {allowed} alcohols.",
            )
        )
    if target.acceptor_hydroxyls > 1:
        found.append(
            Reason(
                "several_acceptor_hydroxyls",
                f"The acceptor has {target.acceptor_hydroxyls} hydroxyl groups, which would all "
                "be glycosylated; protect the others, or plan at least 5 equiv by hand.",
            )
        )
    if target.acceptor_acids and method["promoter"]["catalytic"]:
        found.append(
            Reason(
                "acid_binds_promoter",
                f"A free carboxylic acid binds a catalytic promoter ({method['name']}); use a "
                "stoichiometric one or the ester.",
            )
        )
    for fate in killed(method["promoter"]["survival"], target.acceptor_groups):
        found.append(Reason("group_does_not_survive", _sentence(fate.reason)))
    return tuple(found)


def _deacetylation_reasons(target: Target) -> tuple[Reason, ...]:
    if not target.needs_deacetylation:
        return ()
    condition = deacetylation_method()["survival"]
    found = [
        Reason("group_does_not_survive_deacetylation", _sentence(fate.reason))
        for fate in killed(condition, target.acceptor_groups)
    ]
    if {"Fmoc", "Cbz"} & set(target.acceptor_groups) and not found:
        found.append(
            Reason(
                "beta_elimination",
                "Methoxide can eliminate an O-glycosylated serine or threonine; deacetylate "
                "under watched pH after the peptide is assembled.",
            )
        )
    return tuple(found)
