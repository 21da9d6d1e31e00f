"""Print a planned procedure to a terminal, from its JSON."""

from typing import Any

from rich import box
from rich.console import Console
from rich.padding import Padding
from rich.panel import Panel
from rich.table import Table
from rich.text import Text


def print_procedure(
    console: Console, procedure: dict[str, Any], shelf: list[dict[str, Any]]
) -> None:
    """Target, why, shelf, charges, steps, hazards, expectations: in the order of work."""
    document = procedure["document"]
    _print_target(console, procedure, document)
    route = document["route"]
    if route is None:
        for reason in document["reasons"]:
            console.print(f"[bold]{reason['code']}[/]: {reason['detail']}")
        return
    _print_lines(console, "Why this way", route["why"])
    _print_shelf(console, shelf, route["passed_over"])
    for shortage in route["shortages"]:
        console.print(f"[bold]Short of {shortage['name']}[/]: {shortage['detail']}")
    for stage in route["stages"]:
        _print_charges(console, stage)
        _print_steps(console, stage)
    for warning in route["warnings"]:
        console.print(Text(f"{warning['severity']}: {warning['detail']}", style="bold"))
    _print_hazards(console, document["hazards"])
    if route["stages"]:
        _print_expectations(console, document)
    _print_lines(console, "Read this first", document["cautions"])


def _table(title: str, *columns: tuple[str, bool]) -> Table:
    table = Table(
        title=title, box=box.SIMPLE_HEAD, title_justify="left", title_style="bold",
        pad_edge=False, show_edge=False, padding=(0, 1, 0, 0),
    )  # fmt: skip
    for name, is_figure in columns:
        table.add_column(name, justify="right" if is_figure else "left", overflow="fold")
    return table


def _print_target(console: Console, procedure: dict[str, Any], document: dict[str, Any]) -> None:
    target = document["target"]
    scale = (
        f"{procedure['product_mass_g']} g of product"
        if procedure["product_mass_g"]
        else f"{procedure['acceptor_amount_mmol']} mmol of acceptor"
    )
    text = Text.assemble(
        (target["name"] or target["smiles"], "bold"),
        f"\n{target['formula']}, {target['molar_mass_g_per_mol']} g/mol, {target['inchikey']}",
        f"\n{scale}, charged to {procedure['project']}: {procedure['code']} is ",
        (procedure["state"], "bold"),
    )
    console.print(Panel(text, title="Target", title_align="left"))


def _print_lines(console: Console, title: str, lines: list[str]) -> None:
    console.print(f"\n[bold]{title}[/]")
    for line in lines:
        console.print(Text(f"- {line}"))


def _print_shelf(
    console: Console, shelf: list[dict[str, Any]], passed_over: list[dict[str, Any]]
) -> None:
    table = _table("On the shelf", ("Bottle", False), ("Substance", False), ("On hand", True),
                   ("Usable", True), ("Assay", False), ("Place", False))  # fmt: skip
    for bottle in shelf:
        unit = "mL" if bottle["measured_by"] == "volume" else "mg"
        suffix = f"{'volume' if unit == 'mL' else 'mass'}_{unit.lower()}"
        assay = f"{bottle['assay_pct']} % {bottle['assay_of']}" if bottle["assay_pct"] else ""
        table.add_row(
            bottle["code"], bottle["name"], f"{bottle[f'on_hand_{suffix}']} {unit}",
            f"{bottle[f'usable_{suffix}']} {unit}", assay.replace(" as_is", ""), bottle["place"],
        )  # fmt: skip
    console.print(table)
    for passed in passed_over:
        console.print(
            Text(f"Passed over for {passed['role']}: {passed['bottle']} {passed['reason']}.")
        )


def _print_charges(console: Console, stage: dict[str, Any]) -> None:
    table = _table(
        f"Charges: {stage['kind']}, {stage['method']['name']}; {stage['limiting']} is limiting",
        ("Role", False), ("Substance", False), ("Bottle, place", False),
        ("Equivalents\nplanned: real", True), ("mmol", True), ("Weigh or\nmeasure", True),
    )  # fmt: skip
    table.columns[0].max_width = 10
    for column in table.columns[2:]:
        column.no_wrap = True
    for charge in stage["charges"]:
        table.add_row(
            charge["role"], charge["name"], _where(charge),
            _equivalents(charge), charge["amount_mmol"] or "",
            Text(charge["amount_text"], style="bold"),
        )  # fmt: skip
    console.print(table)
    for charge in stage["charges"]:
        if charge["assay"]:
            console.print(Text(f"  {charge['bottle']}: {charge['assay']}"))
    water = stage["water"]
    console.print(
        Text(
            f"Water counted: {water['total_mmol']} mmol, {water['promoter_share_pct']} % of the "
            f"promoter, {water['donor_share_pct']} % of the donor."
        )
    )


def _where(charge: dict[str, Any]) -> str:
    return f"{charge['bottle']} {charge['place']}" if charge["bottle"] else "supply"


def _equivalents(charge: dict[str, Any]) -> str:
    planned = charge["equivalents_planned"]
    return f"{planned}: {charge['equivalents']}" if planned else ""


def _print_steps(console: Console, stage: dict[str, Any]) -> None:
    console.print("\n[bold]Steps[/]")
    for step in stage["steps"]:
        text = Text.assemble((f"{step['title']}. ", "bold"), step["text"])
        if step["watch"]:
            text.append(f"\nWatch: {step['watch']}.", style="italic")
        text.append(f"\n{step['pause'].capitalize()}.", style="dim")
        row = Table.grid(padding=(0, 1))
        row.add_row(Text(f"{step['number']}.", style="bold"), text)
        console.print(row)


def _print_hazards(console: Console, hazards: list[dict[str, Any]]) -> None:
    console.print("\n[bold]Hazards[/]")
    for line in hazards:
        signal = line["signal_word"] or ("none" if line["established"] else "unknown")
        evidence = f" (evidence: {line['evidence']})" if line["established"] else ""
        console.print(Text.assemble((f"{signal.upper()}: ", "bold"), line["name"], evidence))
        said = [f"{s['code']} {s['text']}" for s in line["hazard_statements"]] or [line["summary"]]
        console.print(Padding(Text("; ".join(said).rstrip(".") + "."), (0, 0, 0, 3)))


def _print_expectations(console: Console, document: dict[str, Any]) -> None:
    expected = document["route"]["stages"][-1]["expected"]
    console.print("\n[bold]What to expect[/]")
    console.print(
        Text(
            f"{expected['mass_mg']} mg at {expected['yield_pct']} % "
            f"({expected['mass_low_mg']} to {expected['mass_high_mg']} mg)."
        )
    )
    for ion in document["expectations"]["ions"]:
        console.print(Text(f"  {ion['species']:28} {ion['ion']:10} {ion['mz']:>10}"))
    console.print(Text(document["expectations"]["anomeric_signal"]["text"] + "."))
