"""Preview routes for one or many targets, on the stock as it is now; nothing is held."""

import argparse
import json
import math
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from django.core.management.base import CommandError, CommandParser
from rich.console import Console
from rich.progress import Progress

from labplan.base.commands import LabCommand
from labplan.base.rights import OPERATOR
from labplan.procedures.engine import DEFAULT_ACCEPTOR_MMOL, Scale, Wishes, preview_target
from labplan.procedures.printing import print_preview


class Command(LabCommand):
    help = "Say how targets could be made from the stock; nothing is stored or held."

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("targets", nargs="*", metavar="SMILES", help="isomeric SMILES")
        parser.add_argument(
            "--file",
            type=Path,
            help="a file with one SMILES a line (a name may follow it); - for stdin",
        )
        scale = parser.add_mutually_exclusive_group()
        scale.add_argument("--product-g", type=_positive, help="grams of product wanted")
        scale.add_argument("--acceptor-mmol", type=_positive, help="mmol of acceptor (default: 1)")
        parser.add_argument("--promoter", help="insist on this promoter, by substance code")
        parser.add_argument("--solvent", help="insist on this solvent, by substance code")
        parser.add_argument("--json", action="store_true", help="one JSON object a line, in order")

    def handle(self, *args: Any, **options: Any) -> None:
        targets = [*options["targets"], *_from_file(options["file"])]
        if not targets:
            raise CommandError("Give targets as arguments, or one a line with --file.")
        scale = _scale(options)
        wishes = Wishes(options["promoter"], options["solvent"])
        console = Console(highlight=False)
        for smiles in _with_progress(targets, show=not options["json"] and len(targets) > 1):
            answer = preview_target(actor=OPERATOR, smiles=smiles, scale=scale, wishes=wishes)
            if options["json"]:
                self.stdout.write(json.dumps({"input": smiles, **answer}, ensure_ascii=False))
            else:
                print_preview(console, smiles, answer)


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not 0 < value < 1e6:
        raise argparse.ArgumentTypeError(f"{text!r} is not a number above 0 and below a million")
    return value


def _scale(options: dict[str, Any]) -> Scale:
    if options["product_g"] is not None:
        return Scale(product_mass_mg=options["product_g"] * 1000)
    return Scale(acceptor_amount_mmol=options["acceptor_mmol"] or DEFAULT_ACCEPTOR_MMOL)


def _from_file(path: Path | None) -> list[str]:
    if path is None:
        return []
    try:
        text = sys.stdin.read() if str(path) == "-" else path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise CommandError(f"{path} cannot be read: {error}.") from error
    # What follows the structure on its line, a name or a number, is the user's own.
    return [line.split()[0] for line in text.splitlines() if line.strip()]


def _with_progress(targets: list[str], *, show: bool) -> Iterator[str]:
    """The targets one by one, with a bar on the terminal's error side."""
    with Progress(console=Console(stderr=True), transient=True, disable=not show) as bar:
        yield from bar.track(targets, description="Planning")
