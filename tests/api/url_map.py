"""The whole URL map, and what is expected of each named route."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from django.urls import URLPattern, URLResolver, get_resolver, reverse

from inventory.models import Notice
from labplan.base import clock
from labplan.base.models import ApiToken
from tests.laboratory import Laboratory, octyl_order

METHODS = ("GET", "HEAD", "POST", "PUT", "PATCH", "DELETE", "OPTIONS", "TRACE", "BREW")
READS = ("GET", "HEAD", "OPTIONS")


@dataclass(frozen=True)
class Expected:
    """What a route serves, and what a person without a project there sees of it.

    `sees`: "stock" (the same as everybody), "nothing" (an empty list), "hidden" (404), "public"
    (holds no data of the laboratory: the same for everybody, also without a token), "own" (of
    everybody what is his own), "door" (takes no token: one comes from there).
    """

    sees: str
    arguments: tuple[str, ...] = ()
    methods: tuple[str, ...] = READS
    # of a POST by somebody without a project
    post_status: int | None = None
    # a POST that only looks may be sent with a token of scope read
    post_only_looks: bool = False
    # concerns only who asks, so that no role is needed
    is_own: bool = False
    # public, but told anew each time: durations, counts
    changes_by_itself: bool = False
    # lies at the root and not under api/v1/; what lies at both is described under the prefix
    only_at_root: bool = False
    # A POST on the shelf itself, which serves all projects: who works in any of them, and an
    # administrator, gets as far as the body (empty here: 422). Others get `post_status`.
    post_on_the_shelf: bool = False
    # a body whose only fault is whose project it names
    body: dict[str, Any] | None = None

    def status_for(self, who: str) -> int | None:
        """What a POST by an outsider of this kind is answered."""
        works_somewhere = who != "stranger" and self.post_on_the_shelf
        return 422 if works_somewhere else self.post_status


# A route that is not in here fails test_rights_walk: say who may see it before it is served.
EXPECTED: dict[str, Expected] = {
    "openapi-document": Expected("public"),
    "documentation-page": Expected("public"),
    "login": Expected("door", (), ("POST", "OPTIONS"), 422, is_own=True),
    "token-list": Expected("own", (), (*READS, "POST"), 422, is_own=True),
    "token-revoke": Expected("hidden", ("token",), ("POST", "OPTIONS"), 404, is_own=True),
    "health-live": Expected("public"),
    "health-ready": Expected("public", changes_by_itself=True),
    "metrics": Expected("public", changes_by_itself=True, only_at_root=True),
    "project-list": Expected("nothing"),
    "project-detail": Expected("hidden", ("project",)),
    "substance-list": Expected("stock"),
    "substance-detail": Expected("stock", ("substance",)),
    "substance-minimum": Expected("stock", ("substance",), ("POST", "OPTIONS"), 403),
    "bottle-list": Expected("stock", (), (*READS, "POST"), 403),
    "bottle-detail": Expected("stock", ("bottle",)),
    "movement-list": Expected(
        "nothing", ("bottle",), (*READS, "POST"), 403, post_on_the_shelf=True
    ),
    "reading-list": Expected("stock", ("bottle",), (*READS, "POST"), 403, post_on_the_shelf=True),
    "bottle-decant": Expected(
        "stock", ("bottle",), ("POST", "OPTIONS"), 403, post_on_the_shelf=True
    ),
    "bottle-status": Expected(
        "stock", ("bottle",), ("POST", "OPTIONS"), 403, post_on_the_shelf=True
    ),
    "stock-count": Expected("stock", (), ("POST", "OPTIONS"), 403),
    "place-list": Expected("stock"),
    "reservation-list": Expected(
        "nothing", (), (*READS, "POST"), 422,
        body={
            "project": "LECTIN-07", "purpose": "p", "lines": [{"bottle": "GPA-1", "mass_mg": 1}],
        },
    ),
    "reservation-detail": Expected("hidden", ("reservation",)),
    "reservation-use": Expected("hidden", ("reservation",), ("POST", "OPTIONS"), 404),
    "reservation-release": Expected("hidden", ("reservation",), ("POST", "OPTIONS"), 404),
    "reservation-extend": Expected("hidden", ("reservation",), ("POST", "OPTIONS"), 404),
    "quota-list": Expected("nothing", (), (*READS, "POST"), 403),
    "notice-list": Expected("nothing"),
    "notice-read": Expected("hidden", ("notice",), ("POST", "OPTIONS"), 404),
    "route-preview": Expected("stock", (), ("POST", "OPTIONS"), 200, post_only_looks=True),
    "procedure-list": Expected("nothing", (), (*READS, "POST"), 422),
    "procedure-detail": Expected("hidden", ("procedure",)),
    "procedure-document": Expected("hidden", ("procedure",)),
    "procedure-sheet-html": Expected("hidden", ("procedure",)),
    "procedure-sheet-pdf": Expected("hidden", ("procedure",)),
    "procedure-cancel": Expected("hidden", ("procedure",), ("POST", "OPTIONS"), 404),
}  # fmt: skip


# Served at the root as well, for load balancers and Prometheus beside the proxy.
AT_ROOT = {"health/live/", "health/ready/", "metrics"}
DESCRIBED = {name: expected for name, expected in EXPECTED.items() if not expected.only_at_root}


def served_patterns() -> Iterator[tuple[str, URLPattern]]:
    """Every pattern of the URL map with its whole route."""
    yield from _walk(get_resolver().url_patterns, "")


def _walk(entries: list[Any], prefix: str) -> Iterator[tuple[str, URLPattern]]:
    for entry in entries:
        route = prefix + str(entry.pattern)
        if isinstance(entry, URLResolver):
            yield from _walk(entry.url_patterns, route)
        else:
            yield route, entry


@dataclass(frozen=True)
class Planted:
    """One planned procedure of LECTIN-07, asked for by MIRA, with all that belongs to it."""

    values: dict[str, str]
    secrets: tuple[str, ...]

    def path(self, name: str) -> str:
        return reverse(name, args=[self.values[part] for part in EXPECTED[name].arguments])

    def leaks(self, text: str, *, told: tuple[str, ...] = ()) -> list[str]:
        """The secrets in a text, after what the asker has said himself is taken out."""
        for known in told:
            text = text.replace(known, "")
        return [secret for secret in self.secrets if secret in text]


def _plant_notice(lab: Laboratory, reservation: str) -> Notice:
    """What MIRA would find if a fact had taken her hold; the hold itself is left alone."""
    return Notice.objects.create(
        person_code="MIRA", project=lab.project(), kind="hold_cancelled", bottle_code="GPA-1",
        reservation_code=reservation, line=1, detail="d", created_at=clock.now(),
    )  # fmt: skip


def plant_procedure(lab: Laboratory) -> Planted:
    client = lab.client("MIRA")
    location = client.post("/api/v1/procedures/", octyl_order())["Location"]
    lab.run_outbox()
    shown = client.get(location).json()
    assert shown["state"] == "planned"
    values = {
        "project": "LECTIN-07",
        "substance": "1-octanol",
        "bottle": "GPA-1",
        "reservation": shown["reservation"],
        "procedure": shown["code"],
        "notice": str(_plant_notice(lab, shown["reservation"]).pk),
        "token": str(ApiToken.objects.filter(person__code="MIRA").latest("pk").pk),
    }
    document = shown["document"]
    secrets = (
        "LECTIN-07", "lectin binding", "MIRA", "Mira", "INES", "JONAS", shown["code"],
        shown["reservation"], shown["target_smiles"], document["target"]["smiles"],
        document["target"]["inchikey"], shown["document_sha256"],
    )  # fmt: skip
    return Planted(values, secrets)
