"""A procedure as JSON."""

import json
from contextlib import suppress
from typing import Any

from django.urls import NoReverseMatch, reverse

from labplan.base.preconditions import etag_of
from labplan.procedures import life, progress
from labplan.procedures.models import Procedure


def etag(procedure: Procedure) -> str:
    """Of the version; what If-Match is held against."""
    return etag_of("procedure", procedure.code, procedure.version)


def detail_etag(procedure: Procedure, queued_before: int | None) -> str:
    """Of what `show_detail` shows, so that If-None-Match never hides progress."""
    seen = f"{procedure.phase}-{queued_before}" if queued_before is not None else ""
    return etag_of("procedure", procedure.code, procedure.version, seen=seen)


def show_summary(procedure: Procedure) -> dict[str, Any]:
    """State and links, without the document."""
    links = {
        name: reverse(f"procedure-{name.replace('_', '-')}", args=[procedure.code])
        for name in ("detail", "document", "sheet_html", "sheet_pdf")
    }
    has_document = procedure.document_id is not None
    mass, mmol = procedure.product_mass_mg, procedure.acceptor_amount_mmol
    return {
        "code": procedure.code,
        "project": procedure.project.code,
        "requested_by": procedure.requested_by,
        "target_smiles": procedure.target_smiles,
        "product_mass_g": f"{(mass / 1000).normalize():f}" if mass is not None else None,
        "acceptor_amount_mmol": f"{mmol.normalize():f}" if mmol is not None else None,
        "promoter": procedure.promoter or None,
        "solvent": procedure.solvent or None,
        "state": procedure.state,
        "actions": _actions(procedure),
        "reasons": json.loads(procedure.reasons),
        "reservation": str(procedure.reservation_code) if procedure.reservation_code else None,
        "lost_holds": json.loads(procedure.lost_holds),
        "created_at": procedure.created_at.isoformat(),
        "settled_at": procedure.settled_at.isoformat() if procedure.settled_at else None,
        "document_sha256": procedure.document.sha256 if procedure.document else None,
        "links": {
            "self": links["detail"],
            "document": links["document"] if has_document else None,
            "sheet_html": links["sheet_html"] if has_document else None,
            "sheet_pdf": links["sheet_pdf"] if has_document else None,
        },
    }


def _actions(procedure: Procedure) -> dict[str, str]:
    """What a person may do now -> where to POST it, as far as it is served."""
    found = {}
    for action in life.actions_in(procedure.state):
        with suppress(NoReverseMatch):
            found[action] = reverse(f"procedure-{action}", args=[procedure.code])
    return found


def show_detail(procedure: Procedure, queued_before: int | None) -> dict[str, Any]:
    document = procedure.document
    shown = {
        "phase": procedure.phase,
        "text": progress.PHASES[procedure.phase],
        "queued_before": queued_before,
    }
    body = json.loads(bytes(document.body)) if document else None
    return {**show_summary(procedure), "progress": shown, "document": body}
