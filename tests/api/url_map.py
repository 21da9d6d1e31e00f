"""The whole URL map, and what is expected of each named route."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from django.urls import URLPattern, URLResolver, get_resolver, reverse

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
    "bottle-list": Expected("stock"),
    "bottle-detail": Expected("stock", ("bottle",)),
    "movement-list": Expected("nothing", ("bottle",)),
    "place-list": Expected("stock"),
    "reservation-list": Expected("nothing"),
    "reservation-detail": Expected("hidden", ("reservation",)),
    "route-preview": Expected("stock", (), ("POST", "OPTIONS"), 200, post_only_looks=True),
    "procedure-list": Expected("nothing", (), (*READS, "POST"), 422),
    "procedure-detail": Expected("hidden", ("procedure",)),
    "procedure-document": Expected("hidden", ("procedure",)),
    "procedure-sheet-html": Expected("hidden", ("procedure",)),
    "procedure-sheet-pdf": Expected("hidden", ("procedure",)),
    "procedure-cancel": Expected("hidden", ("procedure",), ("POST", "OPTIONS"), 404),
}


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
        "token": str(ApiToken.objects.filter(person__code="MIRA").latest("pk").pk),
    }
    document = shown["document"]
    secrets = (
        "LECTIN-07", "lectin binding", "MIRA", "Mira", "INES", "JONAS", shown["code"],
        shown["reservation"], shown["target_smiles"], document["target"]["smiles"],
        document["target"]["inchikey"], shown["document_sha256"],
    )  # fmt: skip
    return Planted(values, secrets)
