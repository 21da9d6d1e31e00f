"""Memory of a web process and of a worker after 50 plans: run as a process of its own.

python -m tests.bench.memory web|worker    prints the PSS in MB
"""

import os
import sys
import tempfile
from pathlib import Path

PLANS = 50


def pss_mb() -> float:
    """Proportional set size of this process."""
    rows = Path("/proc/self/smaps_rollup").read_text().splitlines()
    return int(next(row for row in rows if row.startswith("Pss:")).split()[1]) / 1024


def _empty_laboratory(folder: str) -> None:
    os.environ["LABPLAN_DATA_DIR"] = folder
    os.environ.pop("DATABASE_URL", None)
    os.environ["DJANGO_SETTINGS_MODULE"] = "labplan.settings.default"
    import django
    from django.core.management import call_command

    django.setup()
    call_command("migrate", verbosity=0)
    from tests.laboratory import open_laboratory

    open_laboratory()


def _as_web() -> None:
    """Previews through the WSGI stack, as a web process answers them."""
    from django.test import Client

    from labplan.base.tokens import create_token
    from tests.targets import PENTENYL_LACTOSIDE

    client = Client(
        headers={"Authorization": f"Bearer {create_token(person_code='MIRA', name='x')}"}
    )
    for _ in range(PLANS):
        answer = client.post(
            "/api/v1/routes/",
            data={"target_smiles": PENTENYL_LACTOSIDE, "product_mass_g": "2.000"},
            content_type="application/json",
            headers={"Host": "localhost"},
        )
        assert answer.status_code == 200, answer.content


def _as_worker() -> None:
    """Procedures requested and planned from the outbox, as a worker does."""
    from labplan.base import outbox
    from labplan.procedures.demo.scenario import actor_of
    from labplan.procedures.services import ProcedureOrder, request_procedure
    from tests.targets import PENTENYL_LACTOSIDE

    for _ in range(PLANS):
        order = ProcedureOrder("LECTIN-07", PENTENYL_LACTOSIDE, product_mass_mg=200)  # type: ignore[arg-type]
        request_procedure(actor=actor_of("MIRA"), order=order)
        assert outbox.deliver_waiting() == 1


def main() -> None:
    with tempfile.TemporaryDirectory(prefix="labplan-bench-") as folder:
        _empty_laboratory(folder)
        {"web": _as_web, "worker": _as_worker}[sys.argv[1]]()
        print(f"{pss_mb():.0f}")


if __name__ == "__main__":
    main()
