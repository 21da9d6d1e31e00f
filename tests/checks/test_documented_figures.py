"""docs/chemistry.md says the figures that the methods hold."""

from pathlib import Path

import pytest

from labplan import datafiles

DOCS = Path(__file__).resolve().parents[2] / "docs" / "chemistry.md"


def couplings() -> list[dict[str, object]]:
    rows: list[dict[str, object]] = datafiles.table("methods")["methods"]
    return [row for row in rows if row["kind"] == "coupling"]


@pytest.mark.parametrize("method", couplings(), ids=lambda row: str(row["key"]))
def test_silica_and_eluent_are_documented_as_they_are_charged(method: dict[str, object]) -> None:
    column = method["purification"]
    assert isinstance(column, dict)
    silica, eluent = column["silica_g_per_g_gross"], column["eluent_ml_per_g_silica"]
    said = f"{silica} g of silica a gram of gross crude, {eluent} mL of eluent a gram of silica."
    assert said in DOCS.read_text(encoding="utf-8")
    assert 8 <= eluent <= 12
    assert 30 <= silica <= 60


@pytest.mark.parametrize(
    "group", ["acyl or alkyl ester", "methyl ester", "carbonate", "phthalimide",
              "trifluoroacetamide"],
)  # fmt: skip
def test_what_is_recalled_of_methoxide_is_marked_so(group: str) -> None:
    rows = [row for row in datafiles.table("survival")["rows"] if row["group"] == group]
    assert [(row["condition"], row["evidence"]) for row in rows] == [("methoxide", "from memory")]
