"""The parts of a plan in OpenAPI that hold no figures: the same in a document and a preview."""

from labplan.base.api.describe import component, flag, list_of, or_null, record, text, whole, word

REASON = component(
    "Reason",
    "Why not, or what was assumed.",
    {
        "code": text("For programs.", "below_least_weighable"),
        "detail": text("For people.", "Too little to weigh well (under 20 mg). Ask for more."),
    },
)
SHORTAGE = component(
    "Shortage",
    "One line that no bottle can meet.",
    {
        "stage": text("The stage it is for.", "coupling"),
        "role": text("What it is there for.", "acceptor"),
        "substance": text("Code of the substance.", "1-octanol"),
        "name": text("Its name.", "1-octanol"),
        "needed": text("How much is needed, with its unit.", "1.20 g"),
        "largest_usable": text("What the fullest fitting bottle can give, with its unit.", "0.4 g"),
        "detail": text("What to do."),
    },
)
ROUTE_WARNING = component(
    "RouteWarning",
    "What to mind before and during the work.",
    {
        "code": text("For programs.", "no_gluconate_gel"),
        "severity": word("How much it weighs.", ["note", "caution", "stop"], "caution"),
        "detail": text("For people."),
    },
)
PASSED_OVER = component(
    "PassedOver",
    "A bottle that was looked at and not taken.",
    {
        "bottle": text("Code of the bottle.", "DCM-3"),
        "name": text("Name of the substance.", "dichloromethane"),
        "role": text("What it would have been there for.", "solvent"),
        "reason": text("Why it was not taken.", "expired on 2026-03-31"),
    },
)
STEP = component(
    "Step",
    "One numbered instruction.",
    {
        "number": whole("From 1 in each stage.", 1, minimum=1),
        "title": text("In a few words.", "Dry the flask"),
        "text": text("The instruction in full."),
        "charges": list_of(text("Key of a charge.", "donor"), "The charges used in it."),
        "watch": text("What to watch for; may be empty."),
        "pause": text("Whether the work may rest after it.", "do not stop"),
    },
)
SOURCE = record(
    {
        "key": text("Key in the packaged sources."),
        "citation": text("Where it is published."),
        "doi": or_null(text("Its DOI.")),
    }
)
STATEMENT = record({"code": text("H, EUH or P code.", "H315"), "text": text("Its wording.")})
HAZARDS = component(
    "Hazards",
    "What is known of the hazards of one substance. Unknown is said as unknown, never as none.",
    {
        "substance": text("Code of the substance, or `made here` for a product.", "1-octanol"),
        "name": text("Its name.", "1-octanol"),
        "established": flag("Whether a classification is known at all."),
        "signal_word": or_null(word("Signal word of the classification.", ["Danger", "Warning"])),
        "pictograms": list_of(text("GHS pictogram code.", "GHS07")),
        "hazard_statements": list_of(STATEMENT, "What it does."),
        "precautionary_statements": list_of(STATEMENT, "What to do against it."),
        "summary": text("In a few words.", "Warning"),
        "evidence": text("How good the source is.", "compilation"),
        "source": text("Where the classification was taken from."),
        "note": text("What else to know; may be empty."),
    },
)
