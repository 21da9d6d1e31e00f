"""Memory of a web process and of a worker after 50 plans, each in a process of its own.

python -m tests.bench.memory web|worker    prints the PSS in MB

The database is filled by another process, so that only what serves or plans is counted.
"""

import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

from tests.targets import PENTENYL_LACTOSIDE

PLANS = 50


def pss_mb() -> float:
    """Proportional set size of this process."""
    rows = Path("/proc/self/smaps_rollup").read_text().splitlines()
    return int(next(row for row in rows if row.startswith("Pss:")).split()[1]) / 1024


def _set_up() -> None:
    os.environ.pop("DATABASE_URL", None)
    os.environ["DJANGO_SETTINGS_MODULE"] = "labplan.settings.default"
    import django

    django.setup()


def _fill() -> None:
    """An empty database with the demo's laboratory in it."""
    from django.core.management import call_command

    call_command("migrate", verbosity=0)
    from tests.laboratory import open_laboratory

    open_laboratory()


def _as_web() -> None:
    """Previews through the WSGI application, as a web process answers them."""
    from io import BytesIO

    from labplan.base.tokens import create_token
    from labplan.wsgi import application

    body = json.dumps({"target_smiles": PENTENYL_LACTOSIDE, "product_mass_g": "2.000"}).encode()
    token = create_token(person_code="MIRA", name="bench")
    for _ in range(PLANS):
        environ = {
            "REQUEST_METHOD": "POST", "PATH_INFO": "/api/v1/routes/", "SERVER_NAME": "localhost",
            "SERVER_PORT": "80", "CONTENT_TYPE": "application/json", "wsgi.url_scheme": "http",
            "CONTENT_LENGTH": str(len(body)), "wsgi.input": BytesIO(body),
            "wsgi.errors": sys.stderr, "HTTP_AUTHORIZATION": f"Bearer {token}",
        }  # fmt: skip
        answered: list[str] = []
        application(environ, lambda status, headers, said=answered: said.append(status))
        assert answered == ["200 OK"], answered


def _as_worker() -> None:
    """Procedures requested and planned from the outbox, as a worker does."""
    from labplan.base import outbox
    from labplan.base.models import Person
    from labplan.base.rights import actor_for
    from labplan.procedures.services import ProcedureOrder, request_procedure

    actor = actor_for(Person.objects.get(code="MIRA"))
    for _ in range(PLANS):
        order = ProcedureOrder("LECTIN-07", PENTENYL_LACTOSIDE, product_mass_mg=200)  # type: ignore[arg-type]
        request_procedure(actor=actor, order=order)
        assert outbox.deliver_waiting() == 1


def main() -> None:
    kind = sys.argv[1]
    if kind == "fill":
        _set_up()
        _fill()
        return
    with tempfile.TemporaryDirectory(prefix="labplan-bench-") as folder:
        os.environ["LABPLAN_DATA_DIR"] = folder
        subprocess.run([sys.executable, "-m", "tests.bench.memory", "fill"], check=True)
        _set_up()
        {"web": _as_web, "worker": _as_worker}[kind]()
        print(f"{pss_mb():.0f}")


if __name__ == "__main__":
    main()
