"""Methods are data: one row a way to run a stage (fixtures/methods.json)."""

from typing import Any

from labplan import datafiles
from labplan.chemistry.coupling import Target
from labplan.planning.values import Reason

Method = dict[str, Any]


def coupling_methods() -> list[Method]:
    return [row for row in datafiles.table("methods")["methods"] if row["kind"] == "coupling"]


def find_method(target: Target) -> tuple[Method | None, tuple[Reason, ...]]:
    """Return the first method that fits the target, or None with every reason against it."""
    reasons: tuple[Reason, ...] = ()
    for method in coupling_methods():
        against = reasons_against(target, method)
        if not against:
            return method, ()
        reasons += against
    return None, tuple(dict.fromkeys(reasons))


def reasons_against(target: Target, method: Method) -> tuple[Reason, ...]:
    """Vetoes, never low scores: the sugar, the anomer, the hydroxyls, the groups."""
    return (
        *_sugar_reasons(target, method),
        *_relation_reasons(target),
        *_protection_reasons(target),
        *_acceptor_reasons(target, method),
    )


def _sugar_reasons(target: Target, method: Method) -> tuple[Reason, ...]:
    if target.sugar_rings > 1:
        return (
            Reason(
                "oligosaccharide_not_planned",
                f"The target has {target.sugar_rings} sugar rings; only monosaccharides are "
                "planned so far.",
            ),
        )
    if target.c2_substituent != "O":
        return ()  # said by the 1,2-relation
    if target.residue_key is None:
        return (
            Reason(
                "residue_unknown",
                "The sugar is not in the table of residues, so its peracetate cannot be named.",
            ),
        )
    if target.residue_key not in method["residues"]:
        planned = ", ".join(sorted(method["residues"]))
        return (
            Reason(
                "residue_not_planned",
                f"{target.residue_name} is not among the sugars this method covers: {planned}.",
            ),
        )
    return ()


# What does it elsewhere, named without planning it.
_OTHER_WAYS = {
    "galacto": "an ether-protected or 4,6-silylene galactosyl donor",
    "gluco": "an ether-protected donor under in-situ anomerisation",
    "manno": "a 4,6-benzylidene mannosyl sulfoxide or trichloroacetimidate",
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
    if target.relation == "1,2-cis":
        sugar = target.residue_name or "this sugar"
        return (
            Reason(
                "wrong_relation_1_2_cis",
                f"The target is the {target.anomer or ''} glycoside of {sugar}, which is "
                "1,2-cis; the acetate at C-2 directs the alcohol to the 1,2-trans side. "
                f"Elsewhere this is made with {_other_way(target)}.",
            ),
        )
    return ()


def _other_way(target: Target) -> str:
    from_table = {
        "mannose": "manno",
        "rhamnose": "manno",
        "glucose": "gluco",
        "galactose": "galacto",
        "fucose": "galacto",
    }
    name = (target.residue_name or "").split("-")[-1]
    return _OTHER_WAYS.get(from_table.get(name, ""), "a donor without an acyl group at C-2")


def _protection_reasons(target: Target) -> tuple[Reason, ...]:
    if target.sugar_rings > 1:
        return ()
    found = []
    if target.sugar_hydroxyls:
        found.append(
            Reason(
                "free_hydroxyls",
                f"The sugar of the target has {target.sugar_hydroxyls} free hydroxyl group(s). "
                "The stage that takes acetates off is not planned yet: ask for the per-O-acetate.",
            )
        )
    if target.other_sugar_groups:
        found.append(
            Reason(
                "not_acetates",
                f"{target.other_sugar_groups} oxygen(s) of the sugar carry another group than "
                "acetyl; the donor would not be a peracetate.",
            )
        )
    return tuple(found)


def _acceptor_reasons(target: Target, method: Method) -> tuple[Reason, ...]:
    found = []
    if target.acceptor_oh not in method["acceptor_oh"]:
        allowed = ", ".join(method["acceptor_oh"])
        found.append(
            Reason(
                "acceptor_not_planned",
                f"The acceptor is a {target.acceptor_oh} hydroxyl compound; "
                f"{method['name']} is planned for: {allowed}.",
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
    for group in target.acceptor_groups:
        if group in method["does_not_survive"]:
            found.append(Reason("group_does_not_survive", method["does_not_survive"][group] + "."))
    return tuple(found)
