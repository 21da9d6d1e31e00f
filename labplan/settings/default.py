"""Settings for every installation; what differs between machines comes from the environment.

LABPLAN_DATA_DIR     where the SQLite file and the generated key live (default: var/)
DATABASE_URL         sqlite:///path or postgresql://...  (default: SQLite in LABPLAN_DATA_DIR)
REDIS_URL            broker, redis://... or redis+socket:///path  (make serve starts one if not set)
LABPLAN_SECRET_KEY   Django's key (default: made once and kept in LABPLAN_DATA_DIR)
LABPLAN_SEAL_KEY     key of the seals (default: made once and kept in LABPLAN_DATA_DIR)
LABPLAN_HOSTS        host names served, separated by commas (default: this machine only)
LABPLAN_PROXIES      how many proxies of yours stand before it (default: 0)
LABPLAN_TIME_ZONE    the laboratory's time zone, for dates (default: UTC)
LABPLAN_PLAN_LIMIT_S when a worker that plans one target is killed (default: 30)
LABPLAN_LEASE_S      how long a message may lie in the broker before it is sent again (default: 120)
LABPLAN_PG_BIN       the folder of pg_dump and pg_restore (default: where PATH finds them)
LABPLAN_LOG          plain or json, a line a record on standard error (default: plain)
PROMETHEUS_MULTIPROC_DIR  folder in which all processes of a machine count, for /metrics (default:
                     none; each process then counts for itself)
"""

import os
from pathlib import Path

from labplan.base import logs
from labplan.settings.database import database_from_url
from labplan.settings.environment import (
    broker_address,
    host_names,
    known_time_zone,
    one_of_words,
    whole_seconds,
)
from labplan.settings.proxies import own_proxies
from labplan.settings.secret import read_or_make_secret_key, read_seal_key

BASE_DIR = Path(__file__).resolve().parents[2]
DATA_DIR = Path(os.environ.get("LABPLAN_DATA_DIR") or BASE_DIR / "var")

DEBUG = False
SECRET_KEY = os.environ.get("LABPLAN_SECRET_KEY") or read_or_make_secret_key(DATA_DIR)
# Whoever has it can make seals: keep it and its copies apart from those of the database.
SEAL_KEY = read_seal_key(DATA_DIR)
ALLOWED_HOSTS = host_names("127.0.0.1,localhost,[::1]")

INSTALLED_APPS = [
    "rest_framework",
    "drf_spectacular",
    "labplan.base",
    "inventory",
    "labplan.procedures",
    "labplan.operations",
]
MIDDLEWARE = [
    # Outermost, so that every answer there is has its id, its log line and its count.
    "labplan.base.middleware.RequestMiddleware",
    "django.middleware.security.SecurityMiddleware",
    "labplan.base.middleware.ProblemFallbackMiddleware",
]
ROOT_URLCONF = "labplan.urls"
WSGI_APPLICATION = "labplan.wsgi.application"
APPEND_SLASH = False
TEMPLATES = [
    {
        "BACKEND": "django.template.backends.django.DjangoTemplates",
        "APP_DIRS": True,
        "OPTIONS": {},
    }
]

DATABASES = {
    "default": database_from_url(
        os.environ.get("DATABASE_URL") or f"sqlite:///{DATA_DIR / 'labplan.sqlite3'}"
    )
}
# The broker only carries messages to workers; losing it, or what it holds, loses no work.
BROKER_URL = broker_address()
PLAN_LIMIT_S = whole_seconds("LABPLAN_PLAN_LIMIT_S", 30)
OUTBOX_LEASE_S = whole_seconds("LABPLAN_LEASE_S", 120)
DEFAULT_AUTO_FIELD = "django.db.models.BigAutoField"
AUTH_USER_MODEL = "base.Person"

AUTH_PASSWORD_VALIDATORS = [
    {
        "NAME": f"django.contrib.auth.password_validation.{name}",
        "OPTIONS": options,
    }
    for name, options in (
        ("MinimumLengthValidator", {"min_length": 12}),
        ("UserAttributeSimilarityValidator", {"user_attributes": ("code",)}),
        ("CommonPasswordValidator", {}),
        ("NumericPasswordValidator", {}),
    )
]
OWN_PROXIES = own_proxies()

USE_TZ = True
TIME_ZONE = "UTC"
LAB_TIME_ZONE = known_time_zone(os.environ.get("LABPLAN_TIME_ZONE") or "UTC")
USE_I18N = False
# A body is a few fields; stock lists go through the import command.
DATA_UPLOAD_MAX_MEMORY_SIZE = 1_000_000

REST_FRAMEWORK = {
    "DEFAULT_AUTHENTICATION_CLASSES": ["labplan.base.authentication.BearerTokenAuthentication"],
    "DEFAULT_PERMISSION_CLASSES": ["labplan.base.authentication.HasActor"],
    "DEFAULT_PARSER_CLASSES": ["labplan.base.parsers.StrictJSONParser"],
    "DEFAULT_RENDERER_CLASSES": ["rest_framework.renderers.JSONRenderer"],
    "DEFAULT_PAGINATION_CLASS": "labplan.base.pagination.NewestFirstPagination",
    "PAGE_SIZE": 50,
    "EXCEPTION_HANDLER": "labplan.base.problems.problem_response",
    "UNAUTHENTICATED_USER": None,
    "COERCE_DECIMAL_TO_STRING": True,
    # There is one form of each answer; ?format= is an unknown parameter like any other.
    "URL_FORMAT_OVERRIDE": None,
    "DEFAULT_SCHEMA_CLASS": "drf_spectacular.openapi.AutoSchema",
}
# docs/openapi.yaml is made from this by `make openapi`.
SPECTACULAR_SETTINGS = {
    "OAS_VERSION": "3.1.0",
    "TITLE": "labplan",
    "DESCRIPTION": (
        "Plans glycoside couplings on the stock a laboratory really has.\n\n"
        "Send a token as 'Authorization: Bearer <token>'; bodies are JSON. Units stand in the "
        "names of fields. Unknown fields and parameters are refused (400), values that break a "
        "rule too (422), and every refusal is a problem (RFC 9457) that says what to do.\n\n"
        "Every answer carries X-Request-ID: the one you sent (1 to 64 letters, digits, '.', '_', "
        "'-'), else a new one. Give it to the operator, who finds it in the log.\n\n"
        "labplan is a planning aid: a qualified chemist checks and approves what it writes."
    ),
    "VERSION": "0.1.0",
    "COMPONENT_SPLIT_REQUEST": True,
    "SCHEMA_PATH_PREFIX": "/api/v1",
    "PREPROCESSING_HOOKS": ["labplan.base.api.schema.keep_what_is_versioned"],
    "POSTPROCESSING_HOOKS": ["labplan.base.api.schema.add_what_all_share"],
    "TAGS": [
        {"name": "Routes", "description": "What could be made, before anything is asked for."},
        {"name": "Procedures", "description": "Requested glycosides, from the wish to the flask."},
        {"name": "Stock", "description": "Substances, bottles, places, and the book of a bottle."},
        {"name": "Reservations", "description": "What is set aside, and for which project."},
        {"name": "Projects", "description": "Who may use what."},
        {"name": "Tokens", "description": "What lets a program in: make, list and revoke yours."},
        {"name": "About this API", "description": "This description, for programs and people."},
        {"name": "Health", "description": "For those who run it, and for load balancers."},
    ],
}

LOGGING = logs.logging_configuration(one_of_words("LABPLAN_LOG", logs.STYLES))
# Those who watch ask these every few seconds; an answer that is no error is logged as DEBUG only.
WATCHERS_ROUTES = frozenset({"health-live", "health-ready", "metrics"})
