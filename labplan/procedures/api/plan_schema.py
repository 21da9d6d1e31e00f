"""A plan in OpenAPI, twice: its figures are decimal text in a document, numbers in a preview."""

from collections.abc import Callable

from labplan.base.api.describe import (
    Schema,
    component,
    day,
    decimal,
    flag,
    list_of,
    number,
    or_null,
    record,
    text,
    whole,
    word,
)
from labplan.procedures.api.plan_parts import (
    HAZARDS,
    PASSED_OVER,
    REASON,
    ROUTE_WARNING,
    SHORTAGE,
    SOURCE,
    STEP,
)

Figure = Callable[..., Schema]


class PlanSchemas:
    """The objects of a plan, with every figure described by `figure`."""

    def __init__(self, prefix: str, figure: Figure) -> None:
        self._prefix, self._figure = prefix, figure
        self.structure = self._structure()
        self.coupling = self._coupling()
        self.ion = self._component(
            "Ion",
            "A signal to look for in mass spectrometry.",
            {
                "species": text("What it is of.", "product"),
                "ion": text("The ion.", "[M+Na]+"),
                "mz": figure("Its m/z (monoisotopic).", "483.2201"),
            },
        )
        self.charge = self._charge()
        self.stage = self._stage()
        self.expectations = self._expectations()

    def _component(self, name: str, description: str, properties: dict[str, Schema]) -> Schema:
        return component(self._prefix + name, description, properties)

    def _maybe(self, description: str, example: str) -> Schema:
        return or_null(self._figure(f"{description}; null where it does not apply.", example))

    def _structure(self) -> Schema:
        figure = self._figure
        return self._component(
            "Structure",
            "A molecule.",
            {
                "name": or_null(text("Its name, where one is known.", "1-octanol")),
                "smiles": text("Canonical isomeric SMILES.", "CCCCCCCCO"),
                "inchikey": text("Its InChIKey.", "KBPLFHHGFOOTCA-UHFFFAOYSA-N"),
                "formula": text("Molecular formula (Hill).", "C8H18O"),
                "molar_mass_g_per_mol": figure("Molar mass [g/mol].", "130.231"),
                "monoisotopic_mass_da": figure("Monoisotopic mass [Da].", "130.1358"),
            },
        )

    def _coupling(self) -> Schema:
        return self._component(
            "Coupling",
            "What the target is made from.",
            {
                "donor": self.structure,
                "acceptor": self.structure,
                "glycoside": {
                    **self.structure,
                    "description": "What the coupling gives: the target, or its acetate.",
                },
                "residue": or_null(text("The sugar, where it is known.", "D-glucopyranose")),
                "anomer": or_null(word("The anomer.", ["alpha", "beta"], "beta")),
                "relation": word("How C-1 stands to C-2.", ["1,2-trans", "1,2-cis", "none"]),
            },
        )

    def _charge(self) -> Schema:
        maybe = self._maybe
        return self._component(
            "Charge",
            "One line of what goes into the flask or is used on it.",
            {
                "key": text("Names the charge within its stage.", "donor"),
                "role": text("What it is there for.", "donor"),
                "group": text("Where it stands on the sheet.", "reaction"),
                "substance": text("Code of the substance.", "1-octanol"),
                "name": text("Its name.", "1-octanol"),
                "cas": or_null(text("CAS registry number.", "111-87-5")),
                "printed_name": text("Name as printed, with its form.", "1-octanol"),
                "form": or_null(text("How it comes in its bottle.", "neat")),
                "bottle": or_null(text("Code of the bottle; null for what a stage made.", "OCT-1")),
                "from_stage": or_null(whole("Number of the stage that made it.", 1, minimum=1)),
                "lot": or_null(text("Lot of the bottle.", "L-2207")),
                "place": or_null(text("Code of the place of the bottle.", "CAB-A")),
                "place_name": or_null(text("Name of that place.", "Cabinet A")),
                "equivalents_planned": maybe("Equivalents the method asks for", "1.2"),
                "equivalents": maybe("Equivalents after rounding the amount", "1.201"),
                "equivalents_of": or_null(text("What the equivalents are of.", "donor")),
                "amount_mmol": maybe("Amount of the substance itself [mmol]", "6.1500"),
                "mass_mg": maybe("Mass to weigh, of what is in the bottle [mg]", "810.0"),
                "volume_ml": maybe("Volume to measure [mL]", "0.980"),
                "dispense": word("Whether to weigh or to measure it.", ["mass", "volume"]),
                "amount_text": text("The amount as printed.", "810 mg"),
                "assay": or_null(text("The assay that was reckoned with.")),
                "density_g_per_ml": maybe("Density of what is in the bottle [g/mL]", "0.8270"),
                "molar_mass_g_per_mol": maybe("Molar mass [g/mol]", "130.231"),
            },
        )  # fmt: skip

    def _water(self) -> Schema:
        line = record(
            {
                "charge": text("Key of the charge.", "solvent"),
                "amount_mmol": or_null(self._figure("Water in it [mmol]; null when not known.")),
            }
        )
        return self._component(
            "Water",
            "Where water comes from and what it costs.",
            {
                "lines": list_of(line),
                "total_mmol": self._figure("Water in all charges known [mmol].", "0.05"),
                "promoter_share_pct": self._figure("Of the promoter or reagent [%].", "0.4"),
                "donor_share_pct": self._figure("Of the donor or substrate [%].", "0.8"),
            },
        )

    def _quench(self) -> Schema:
        figure = self._figure
        return self._component(
            "Quench",
            "The neutralisation of a Lewis acid: base, gas, vessel.",
            {
                "vessel_ml": whole("Open vessel to use [mL].", 1000),
                "acid_mmol": figure("Acid set free [mmol].", "24.6"),
                "bicarbonate_mmol": figure("Hydrogen carbonate, with its excess [mmol].", "32.0"),
                "clear_solution_ml": figure("Water that would dissolve it all at 0 °C [mL].", "60"),
                "carbon_dioxide_l": figure("Gas set free [L].", "0.59"),
            },
        )

    def _expected(self) -> Schema:
        figure = self._figure
        return record(
            {
                "yield_pct": figure("Planned yield [%].", "70"),
                "yield_low_pct": figure("Low end of the yield [%].", "55"),
                "yield_high_pct": figure("High end of the yield [%].", "80"),
                "mass_mg": figure("Pure product at the planned yield [mg].", "2000.0"),
                "mass_low_mg": figure("Pure product at the low end [mg].", "1571"),
                "mass_high_mg": figure("Pure product at the high end [mg].", "2286"),
                "gross_mass_mg": figure("What stands in the flask before purification [mg]."),
                "gross_means": text("What the gross mass is of."),
            },
            "What should come out.",
        )

    def _stage(self) -> Schema:
        method = record(
            {
                "key": text("Key of the method."),
                "name": text("Its name."),
                "sources": list_of(SOURCE, "Where it was taken from."),
            }
        )
        return self._component(
            "Stage",
            "One flask: its charges, its steps, what it gives.",
            {
                "number": whole("From 1, in the order of the work.", 1, minimum=1),
                "kind": word("What is done.", ["acetylation", "coupling", "deacetylation"]),
                "method": method,
                "limiting": text("Key of the charge that limits.", "donor"),
                "scale_mmol": self._figure("Amount of that charge [mmol].", "5.125"),
                "provisional": flag(
                    "Whether it has to be reckoned again with what an earlier stage gave.", False
                ),
                "product": self.structure,
                "charges": list_of(self.charge),
                "water": or_null(self._water()),
                "vessel_ml": whole("Flask to use [mL].", 100),
                "quench": or_null(self._quench()),
                "adiabatic_rise_k": self._maybe("Rise of temperature if all heat stayed [K]", "12"),
                "expected": self._expected(),
                "ions": list_of(self.ion, "Ions to look for after this stage."),
                "steps": list_of(STEP),
            },
        )

    def route_fields(self) -> dict[str, Schema]:
        return {
            "rank": whole("Place among the routes; 1 is the best.", 1, minimum=1),
            "method": text("Key of the method of the coupling."),
            "available": flag("Whether the stock meets all of it."),
            "why": list_of(text("A sentence."), "Why this route."),
            "warnings": list_of(ROUTE_WARNING),
            "shortages": list_of(SHORTAGE, "What is missing; empty when it is available."),
            "passed_over": list_of(PASSED_OVER),
            "stages": list_of(self.stage, "In the order of the work; empty when not available."),
        }

    def _expectations(self) -> Schema:
        figure = self._figure
        mass = record(
            {name: figure(f"Pure product, {name} [mg].") for name in ("low", "planned", "high")}
        )
        side_product = record(
            {
                "name": text("What it is."),
                "formula": text("Molecular formula (Hill)."),
                "monoisotopic_mass_da": figure("Monoisotopic mass [Da]."),
                "told_apart_by": text("How to tell it from the product."),
            }
        )
        signal = record(
            {
                "coupling_hz": or_null(list_of(figure("Bound of the coupling constant [Hz]."))),
                "text": text("What to look for in the NMR spectrum."),
            }
        )
        return self._component(
            "Expectations",
            "What should come out of the whole route, and how it shows.",
            {
                "mass_mg": or_null(mass),
                "ions": list_of(self.ion),
                "side_products": list_of(side_product),
                "anomeric_signal": signal,
            },
        )


def _json_number(description: str, example: str = "1.5") -> Schema:
    return number(description, float(example))


IN_DOCUMENT = PlanSchemas("", decimal)
IN_PREVIEW = PlanSchemas("Preview", _json_number)
_VERDICT = word("Whether it can be made at all.", ["plannable", "not_plannable"])

DOCUMENT = component(
    "Document",
    "A plan as it was stored: never serialised again, the same bytes for ever.",
    {
        "format": text("Name of this form.", "labplan-procedure-1"),
        "as_of": day("The laboratory's date of the plan."),
        "versions": record(
            {
                "engine": text("Version of the engine."),
                "data": text("Version of the packaged data."),
                "rdkit": text("Version of RDKit."),
            },
            "What made it.",
        ),
        "target": IN_DOCUMENT.structure,
        "coupling": IN_DOCUMENT.coupling,
        "verdict": _VERDICT,
        "reasons": list_of(REASON),
        "route": or_null(
            component("Route", "A way to the target, sized.", IN_DOCUMENT.route_fields())
        ),
        "other_routes": list_of(
            record(
                {
                    "rank": whole("Place among the routes.", 2, minimum=2),
                    "method": text("Key of the method of the coupling."),
                    "name": text("Its name."),
                    "available": flag("Whether the stock meets all of it."),
                    "shortages": list_of(SHORTAGE),
                }
            ),
            "What else was looked at.",
        ),
        "hazards": list_of(HAZARDS, "One entry a substance, worst first."),
        "expectations": or_null(IN_DOCUMENT.expectations),
        "cautions": list_of(text("A sentence."), "What holds for every sheet."),
        "drawings": list_of(
            record(
                {
                    "key": text("What is drawn.", "donor"),
                    "svg": text("The drawing as SVG."),
                    "width_mm": decimal("Its width [mm].", "40.0"),
                    "height_mm": decimal("Its height [mm].", "25.0"),
                }
            ),
            "The scheme, all at one scale.",
        ),
        "rows_used": list_of(
            record(
                {
                    "table": text("Table of the packaged data.", "methods"),
                    "key": text("Key of the row."),
                    "sha256": text("Hash of the row as it was used."),
                }
            )
        ),
    },
)
PREVIEW = component(
    "Preview",
    "What could be made and how. Nothing is stored or held; amounts are JSON numbers.",
    {
        "target": or_null(IN_PREVIEW.structure),
        "verdict": _VERDICT,
        "reasons": list_of(REASON, "Why not, or what was assumed."),
        "coupling": or_null(IN_PREVIEW.coupling),
        "routes": list_of(
            component(
                "PreviewRoute",
                "A way to the target, sized.",
                {
                    **IN_PREVIEW.route_fields(),
                    "score": or_null(number("Planned yield over all stages, as a fraction.", 0.7)),
                },
            ),
            "Best first: what the stock can meet before what it cannot.",
        ),
        "expectations": or_null(IN_PREVIEW.expectations),
    },
)
