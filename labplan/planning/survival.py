"""What survives what (fixtures/survival.json): one table for methods and for later steps."""

from dataclasses import dataclass

from labplan import datafiles


@dataclass(frozen=True)
class Fate:
    """What a condition does to a group: `verdict` is "yes", "care" or "no", with its reason."""

    group: str
    verdict: str
    reason: str


def fates(condition: str, groups: tuple[str, ...]) -> tuple[Fate, ...]:
    """The fate of each group that has a row for the condition, in the order of the groups."""
    rows = {
        row["group"]: Fate(row["group"], row["verdict"], row["reason"])
        for row in datafiles.table("survival")["rows"]
        if row["condition"] == condition
    }
    return tuple(rows[group] for group in groups if group in rows)


def killed(condition: str, groups: tuple[str, ...]) -> tuple[Fate, ...]:
    return tuple(fate for fate in fates(condition, groups) if fate.verdict == "no")


def endangered(condition: str, groups: tuple[str, ...]) -> tuple[Fate, ...]:
    return tuple(fate for fate in fates(condition, groups) if fate.verdict == "care")
