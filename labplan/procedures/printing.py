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
    """A requested procedure: whose it is and what the shelf holds, then its document."""
    scale = (
        f"{procedure['product_mass_g']} g of product"
        if procedure["product_mass_g"]
        else f"{procedure['acceptor_amount_mmol']} mmol of acceptor"
    )
    about = f"{scale}, charged to {procedure['project']}: {procedure['code']} is "
    _print_target(console, procedure["document"]["target"], about, procedure["state"])
    print_document(console, procedure["document"], shelf)


def print_document(console: Console, document: dict[str, Any], shelf: list[dict[str, Any]]) -> None:
    """Why, shelf, each stage with charges and steps, hazards, expectations."""
    route = document["route"]
    if route is None:
        _print_lines(console, "Why not", [r["detail"] for r in document["reasons"]])
        return
    print_route(console, route, shelf)
    if route["stages"]:
        _print_hazards(console, document["hazards"])
        _print_expectations(console, document["expectations"])
    _print_lines(console, "Read this first", document["cautions"])


def print_route(
    console: Console, route: dict[str, Any], shelf: list[dict[str, Any]] | None = None
) -> None:
    _print_lines(console, "Why this way", route["why"])
    if shelf:
        _print_shelf(console, shelf)
    for passed in route["passed_over"]:
        console.print(
            Text(f"Passed over as {passed['role']}: {passed['bottle']} {passed['reason']}.")
        )
    for shortage in route["shortages"]:
        name = f"Short, {shortage['stage']}: {shortage['needed']} of {shortage['name']}"
        console.print(Text.assemble((name, "bold"), f"; {shortage['detail']}."))
    _print_lines(
        console,
        "Mind",
        [f"{warning['severity'].upper()}: {warning['detail']}" for warning in route["warnings"]],
    )
    for stage in route["stages"]:
        _print_stage(console, stage)


def print_preview(console: Console, smiles: str, answer: dict[str, Any]) -> None:
    """The answer of a preview: the best route in full, the others by a line each."""
    target = answer["target"]
    if target is None:
        _print_lines(console, smiles, [r["detail"] for r in answer["reasons"]])
        return
    routes = answer["routes"]
    state = answer["verdict"].replace("_", " ")
    if routes and not routes[0]["available"]:
        state = "plannable, but the shelf is short"
    _print_target(console, target, "", state)
    _print_lines(console, "Why not", [r["detail"] for r in answer["reasons"]])
    if routes:
        print_route(console, routes[0])
    _print_lines(
        console,
        "Other ways",
        [
            f"{other['method']}: {'available' if other['available'] else 'short'}"
            for other in routes[1:]
        ],
    )
    if routes and routes[0]["stages"]:
        _print_expectations(console, answer["expectations"])


def _table(title: str, *columns: tuple[str, bool]) -> Table:
    table = Table(
        title=title, box=box.SIMPLE_HEAD, title_justify="left", title_style="bold",
        pad_edge=False, show_edge=False, padding=(0, 1, 0, 0),
    )  # fmt: skip
    for name, is_figure in columns:
        table.add_column(name, justify="right" if is_figure else "left", overflow="fold")
    return table


def _print_target(console: Console, target: dict[str, Any], about: str, state: str) -> None:
    text = Text.assemble(
        (target["name"] or target["smiles"], "bold"),
        f"\n{target['formula']}, {target['molar_mass_g_per_mol']} g/mol, {target['inchikey']}\n",
        about,
        (state, "bold"),
    )
    console.print(Panel(text, title="Target", title_align="left"))


def _print_lines(console: Console, title: str, lines: list[str]) -> None:
    if not lines:
        return
    console.print(f"\n[bold]{title}[/]")
    for line in lines:
        row = Table.grid(padding=(0, 1))
        row.add_row("-", Text(line))
        console.print(row)


def _print_shelf(console: Console, shelf: list[dict[str, Any]]) -> None:
    table = _table("On the shelf, after this plan's own holds", ("Bottle", False),
                   ("Substance", False), ("On hand", True), ("Free", True), ("Assay", False),
                   ("Place", False))  # fmt: skip
    for bottle in shelf:
        assay = f"{bottle['assay_pct']} % {bottle['assay_of']}" if bottle["assay_pct"] else ""
        table.add_row(
            bottle["code"], bottle["name"], _shelf_amount(bottle, "on_hand"),
            _shelf_amount(bottle, "usable"), assay.replace(" as_is", ""), bottle["place"],
        )  # fmt: skip
    console.print(table)


def _shelf_amount(bottle: dict[str, Any], which: str) -> str:
    if bottle["measured_by"] == "volume":
        return f"{bottle[f'{which}_volume_ml']} mL"
    return f"{float(bottle[f'{which}_mass_mg']) / 1000:.6g} g"


def _print_stage(console: Console, stage: dict[str, Any]) -> None:
    console.print()
    console.rule(
        f"[bold]Stage {stage['number']}: {stage['kind']}, {stage['method']['name']}[/]",
        align="left",
    )
    _print_charges(console, stage)
    _print_numbers(console, stage)
    _print_steps(console, stage)


def _print_charges(console: Console, stage: dict[str, Any]) -> None:
    table = _table(
        f"Charges; the {stage['limiting']} is limiting",
        ("Role", False), ("Substance", False), ("Bottle,\nplace", False),
        ("Equivalents\nplanned: real", True), ("mmol", True), ("Weigh or\nmeasure", True),
    )  # fmt: skip
    table.columns[0].max_width = max(
        len(word) for charge in stage["charges"] for word in charge["role"].split()
    )
    for column in table.columns[2:]:
        column.no_wrap = True
    for charge in stage["charges"]:
        table.add_row(
            charge["role"], charge["printed_name"], _where(charge),
            _equivalents(charge), str(charge["amount_mmol"] or ""),
            Text(charge["amount_text"], style="bold"),
        )  # fmt: skip
    console.print(table)
    for charge in stage["charges"]:
        if charge["assay"] and charge["bottle"]:
            console.print(Text(f"  {charge['bottle']}: {charge['assay']}"))


def _print_numbers(console: Console, stage: dict[str, Any]) -> None:
    """Water, quench, heat and what the stage gives."""
    water, quench, expected = stage["water"], stage["quench"], stage["expected"]
    if water:
        console.print(
            Text(
                f"Water counted: {water['total_mmol']} mmol, {water['promoter_share_pct']} % of "
                f"the promoter, {water['donor_share_pct']} % of the donor."
            )
        )
    if quench:
        console.print(
            Text(
                f"Quench: {quench['acid_mmol']} mmol of acid, {quench['bicarbonate_mmol']} mmol of "
                f"bicarbonate, carbon dioxide to {quench['carbon_dioxide_l']} L, open "
                f"{quench['vessel_ml']} mL beaker."
            )
        )
    if stage["adiabatic_rise_k"]:
        console.print(Text(f"Adiabatic rise: about {stage['adiabatic_rise_k']} K."))
    console.print(
        Text(
            f"Gives {expected['mass_mg']} mg of {stage['product']['name']} at "
            f"{expected['yield_pct']} % ({expected['mass_low_mg']} to {expected['mass_high_mg']} "
            f"mg); {expected['gross_mass_mg']} mg is {expected['gross_means']}."
        )
    )


def _where(charge: dict[str, Any]) -> str:
    if charge["from_stage"]:
        return f"stage {charge['from_stage']}"
    return f"{charge['bottle']} {charge['place']}" if charge["bottle"] else "supply"


def _equivalents(charge: dict[str, Any]) -> str:
    planned = charge["equivalents_planned"]
    return f"{float(planned):.3f}: {float(charge['equivalents']):.3f}" if planned else ""


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


def _print_expectations(console: Console, expected: dict[str, Any]) -> None:
    mass = expected["mass_mg"]
    console.print("\n[bold]What to expect[/]")
    if mass:
        console.print(
            Text(f"{mass['planned']} mg from the whole route ({mass['low']} to {mass['high']} mg).")
        )
    for ion in expected["ions"]:
        console.print(Text(f"  {ion['species']:28} {ion['ion']:10} {float(ion['mz']):>10.4f}"))
    console.print(Text(expected["anomeric_signal"]["text"] + "."))
