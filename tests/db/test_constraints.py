"""Every CHECK and UNIQUE of the apps, attacked by raw SQL past the models and services."""

import uuid
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any

import pytest
from django.apps import apps
from django.db import DataError, IntegrityError, connection, models, transaction

from inventory.models import Bottle, Form, Hold, Movement, Place, Reservation, Substance
from labplan.base.models import Person, Project
from labplan.base.seal import seal_new
from labplan.procedures.models import Document, Procedure
from tests.db.bench import ON_POSTGRESQL, drop_trigger, insert, make_shelf, rows_of

pytestmark = pytest.mark.django_db
APPS = ("base", "inventory", "procedures")
NOON = "2026-12-01 12:00:00+00:00"
TOO_MUCH = 10**15 + 1


@pytest.fixture
def _stock() -> None:
    """One row of each kind that others point at."""
    shelf = make_shelf(A=100_000, B=100_000)
    shelf.hold(("A", 1_000))
    drop_trigger("inventory_movement", "inventory_movement_carries_on")
    Procedure.objects.create(
        code="P-OLD", project=shelf.project, requested_by="LEAD", target_smiles="C",
        product_mass_mg=1, state="queued", created_at=NOON, reservation_code=uuid.UUID(int=7),
    )  # fmt: skip
    Document.objects.create(
        procedure=Procedure.objects.get(), attempt=1, body=b"{}", sha256="0" * 64, created_at=NOON
    )
    seal_new()
    for table in ("base_seal", "base_sealrun"):
        drop_trigger(table, f"{table}_carries_on")


def _key(model: type[models.Model], **where: Any) -> int:
    return model.objects.filter(**where).values_list("pk", flat=True)[0]  # type: ignore[attr-defined]


def _sound_row(table: str) -> dict[str, Any]:
    """Values of a new row that the database takes; the attacks change one or two of them."""
    return SOUND_ROWS[table](uuid.uuid4().hex[:12])


def _bottle_row(code: str) -> dict[str, Any]:
    return {
        "code": code, "form_id": _key(Form), "measured_by": "mass", "heel": 0,
        "least_dispensed": 1, "tare_ug": 30_000_000, "preparation": "", "version": 1, "lot": "",
        "supplier": "", "assay_of": "as_is", "assay_kind": "unspecified",
        "stabiliser_state": "none", "stabiliser_name": "", "stabiliser_basis": "",
        "place_id": _key(Place), "received_on": "2026-06-15", "status": "usable", "note": "",
    }  # fmt: skip


def _balance_row(code: str) -> dict[str, Any]:
    insert("inventory_bottle", _bottle_row(code))
    return {
        "bottle_id": _key(Bottle, code=code), "on_hand": 10, "held": 10, "seq": 0,
        "is_usable": True,
    }  # fmt: skip


def _membership_row(code: str) -> dict[str, Any]:
    project = Project.objects.create(code=code, title="T", created_at=NOON)
    return {"person_id": _key(Person), "project_id": project.pk, "role": "viewer"}


SOUND_ROWS: dict[str, Callable[[str], dict[str, Any]]] = {
    "base_person": lambda code: {
        "password": "", "code": code, "site_role": "none", "is_active": True,
    },
    "base_project": lambda code: {"code": code, "title": "T", "is_open": True, "created_at": NOON},
    "base_membership": _membership_row,
    "base_apitoken": lambda code: {
        "person_id": _key(Person), "name": "n", "digest": code, "scope": "read",
        "created_at": NOON, "expires_at": NOON, "by_login": False,
    },
    "base_logincount": lambda code: {
        "kind": "code", "digest": code, "quarter": 1, "attempts": 1,
    },
    "base_rememberedanswer": lambda code: {
        "person_id": _key(Person), "route": "r", "key": code, "fingerprint": "f", "status": 202,
        "headers": "{}", "body": "", "created_at": NOON,
    },
    "base_outboxmessage": lambda code: {
        "topic": "t", "queue": "q", "payload": "{}", "request_id": "", "state": "new", "sends": 0,
        "attempts": 0, "created_at": NOON, "available_at": NOON, "last_error": "",
    },
    "base_seal": lambda code: {
        "number": 2, "sealed_at": NOON, "key_print": "p", "before": "0" * 64, "runs": 3, "rows": 3,
        "digest": "1" * 64,
    },
    "base_sealrun": lambda code: {
        "seal_id": 1, "book": code, "subject": 0, "first": 5, "last": 6, "marks": "m" * 16,
        "digest": "1" * 64,
    },
    "base_outboxpause": lambda code: {"id": 1, "since": NOON, "reason": "r"},
    "inventory_place": lambda code: {"code": code, "name": "n", "is_locked": False},
    "inventory_substance": lambda code: {
        "code": code, "kind": "defined", "name": "n", "search_key": "n", "cas": "",
        "smiles": "C", "inchikey": code, "formula": "", "density_source": "",
        "minimum": 5, "minimum_measured_by": "mass", "version": 1,
    },
    "inventory_form": lambda code: {
        "substance_id": _key(Substance), "kind": "neat", "solution_basis": "", "cas": "",
        "label": code,
    },
    "inventory_bottle": _bottle_row,
    "inventory_reading": lambda code: {
        "bottle_id": _key(Bottle), "kind": "water_ppm", "value": 1, "method": "",
        "read_on": "2026-06-15", "actor_code": "A", "recorded_at": NOON,
    },
    "inventory_balance": _balance_row,
    "inventory_reservation": lambda code: {
        "code": uuid.uuid4().hex, "project_id": _key(Project), "actor_code": "A", "purpose": "p",
        "state": "closed", "is_firm": False, "expires_on": "2026-12-15", "created_at": NOON,
        "version": 1,
    },
    "inventory_hold": lambda code: {
        "reservation_id": _key(Reservation), "line": 9, "bottle_id": _key(Bottle), "amount": 10,
        "used": 4, "given_back": 6, "state": "used",
    },
    "inventory_movement": lambda code: {
        "bottle_id": _key(Bottle, code="B"), "seq": 2, "kind": "receipt", "on_hand_change": 5,
        "held_change": 0, "on_hand_after": 100_005, "held_after": 0, "entered_amount": "5",
        "entered_unit": "ug", "density_source": "", "amount_nmol": 1,
        "operation": uuid.uuid4().hex, "part": 1, "actor_code": "A",
        "reason": "", "booked_on": "2026-12-01", "recorded_at": NOON,
    },
    "inventory_quota": lambda code: {
        "project_id": _key(Project), "substance_id": _key(Substance), "starts_on": "2026-01-01",
        "ends_on": "2026-12-31", "measured_by": "mass", "amount": 5, "actor_code": "A",
        "reason": "", "created_at": NOON, "version": 1,
    },
    "inventory_notice": lambda code: {
        "person_code": "A", "project_id": _key(Project), "kind": "hold_cancelled",
        "bottle_code": "A", "reservation_code": uuid.uuid4().hex, "line": 1, "detail": "d",
        "created_at": NOON,
    },
    "procedures_procedure": lambda code: {
        "code": code, "project_id": _key(Project), "requested_by": "LEAD", "target_smiles": "C",
        "product_mass_mg": 1, "promoter": "", "solvent": "", "state": "queued", "reasons": "[]",
        "lost_holds": "[]", "attempt": 0, "broken_off": 0, "phase": "waiting", "version": 1,
        "created_at": NOON,
    },
    "procedures_document": lambda code: {
        "procedure_id": _key(Procedure), "attempt": 2, "body": b"{}", "sha256": "0" * 64,
        "seal": "", "created_at": NOON,
    },
}  # fmt: skip
TABLES = tuple(SOUND_ROWS)


@dataclass(frozen=True)
class Attack:
    """A sound row but for these values; the named constraint must refuse it."""

    constraint: str
    table: str
    changes: dict[str, Any] = field(default_factory=dict)
    # names that may answer first: such a row cannot help breaking them too
    or_by: tuple[str, ...] = ()

    def __str__(self) -> str:
        return f"{self.constraint}: {self.changes}"


def _whole(constraint: str, table: str, column: str, lowest: int) -> list[Attack]:
    return [Attack(constraint, table, {column: value}) for value in (lowest - 1, TOO_MUCH)]


def _held(kind: str, change: int, after: int, held: int) -> dict[str, Any]:
    """A movement on bottle B, which has 100,000 on hand and nothing held."""
    return {"kind": kind, "on_hand_change": change, "on_hand_after": 100_000 + change,
            "held_change": held, "held_after": after}  # fmt: skip


KINDS_UP = ("receipt", "return", "decant_in")
KINDS_DOWN = ("use", "decant_out", "loss", "disposal")
KINDS_STILL = ("hold", "release", "lapse", "transfer")
MOVEMENT = "inventory_movement"
PROCEDURE = "procedures_procedure"
CHECKS = [
    Attack("person_site_role_known", "base_person", {"site_role": "root"}),
    Attack("membership_role_known", "base_membership", {"role": "owner"}),
    Attack("api_token_scope_known", "base_apitoken", {"scope": "reed"}),
    Attack("login_count_kind_known", "base_logincount", {"kind": "name"}),
    Attack("login_count_quarter_whole", "base_logincount", {"quarter": -1}),
    Attack("login_count_attempts_whole", "base_logincount", {"attempts": -1}),
    Attack("outbox_state_known", "base_outboxmessage", {"state": "lost"}),
    Attack("seal_number_whole", "base_seal", {"number": 0}),
    Attack("seal_runs_whole", "base_seal", {"runs": 0}),
    Attack("seal_rows_whole", "base_seal", {"rows": 0}, ("seal_rows_fill_runs",)),
    Attack("seal_rows_fill_runs", "base_seal", {"rows": 2}),
    *[
        Attack(f"seal_{column}_long", "base_seal", {column: value})
        for column in ("before", "digest") for value in ("", "1" * 63)
    ],
    Attack("seal_run_subject_whole", "base_sealrun", {"subject": -1}),
    Attack("seal_run_first_whole", "base_sealrun", {"first": 0, "last": 1}),
    Attack(
        "seal_run_last_whole", "base_sealrun", {"first": -1, "last": 0},
        ("seal_run_first_whole",),
    ),
    Attack(
        "seal_run_has_rows", "base_sealrun", {"first": 7, "marks": ""}, ("seal_run_row_marked",)
    ),
    Attack("seal_run_digest_long", "base_sealrun", {"digest": "1" * 63}),
    *[Attack("seal_run_row_marked", "base_sealrun", {"marks": "m" * n}) for n in (0, 15, 17, 24)],
    Attack("outbox_pause_is_one", "base_outboxpause", {"id": 2}),
    Attack("substance_kind_known", "inventory_substance", {"kind": "wish"}),
    Attack("substance_defined_has_structure", "inventory_substance", {"inchikey": None}),
    Attack("substance_defined_has_structure", "inventory_substance", {"smiles": ""}),
    Attack("form_kind_known", "inventory_form", {"kind": "gas"}),
    Attack("form_hydrate_has_water", "inventory_form", {"kind": "hydrate", "hydrate_water": 0}),
    Attack("form_hydrate_has_water", "inventory_form", {"kind": "hydrate", "hydrate_water": -1}),
    Attack("form_hydrate_has_water", "inventory_form", {"kind": "hydrate", "hydrate_water": 31}),
    Attack("form_hydrate_has_water", "inventory_form", {"kind": "hydrate", "hydrate_water": None}),
    Attack(
        "form_solution_has_strength", "inventory_form",
        {"kind": "solution", "solution_basis": "mol_per_l", "solution_value": 0},
    ),
    Attack(
        "form_solution_has_strength", "inventory_form",
        {"kind": "solution", "solution_basis": "mol_per_l", "solution_value": None},
    ),
    Attack(
        "form_solution_has_strength", "inventory_form",
        {"kind": "solution", "solution_basis": "", "solution_value": 1},
    ),
    *[
        Attack(
            "form_mixture_has_share", "inventory_form",
            {"kind": "anomer_mixture", "active_share_pct": share},
        )
        for share in (0, 101, None)
    ],
    Attack("bottle_measured_by_known", "inventory_bottle", {"measured_by": "eye"}),
    Attack("bottle_status_known", "inventory_bottle", {"status": "lost"}),
    Attack("bottle_assay_kind_known", "inventory_bottle", {"assay_kind": "guess"}),
    Attack("bottle_stabiliser_known", "inventory_bottle", {"stabiliser_state": "maybe"}),
    *_whole("bottle_heel_whole", "inventory_bottle", "heel", 0),
    *_whole("bottle_least_whole", "inventory_bottle", "least_dispensed", 0),
    *_whole("bottle_tare_whole", "inventory_bottle", "tare_ug", 0),
    Attack("bottle_lineage_has_parent", "inventory_bottle", {"parent_movement_id": 1}),
    *_whole("substance_minimum_whole", "inventory_substance", "minimum", 0),
    *[
        Attack("substance_minimum_has_unit", "inventory_substance", changes)
        for changes in (
            {"minimum": None}, {"minimum_measured_by": ""}, {"minimum_measured_by": "eye"},
        )
    ],
    Attack("quota_measured_by_known", "inventory_quota", {"measured_by": "eye"}),
    *_whole("quota_amount_whole", "inventory_quota", "amount", 0),
    Attack("quota_period_runs_forward", "inventory_quota", {"ends_on": "2025-12-31"}),
    Attack("notice_kind_known", "inventory_notice", {"kind": "rumour"}),
    *[Attack("bottle_assay_in_range", "inventory_bottle", {"assay_pct": v}) for v in (0, -1, 101)],
    *[
        Attack("bottle_density_positive", "inventory_bottle", {"density_g_per_ml": value})
        for value in (0, -1, 26)
    ],
    Attack("reading_kind_known", "inventory_reading", {"kind": "colour"}),
    Attack("reading_not_negative", "inventory_reading", {"value": -1}),
    *_whole("balance_on_hand_whole", "inventory_balance", "on_hand", 0)[1:],
    Attack(
        "balance_on_hand_whole", "inventory_balance", {"on_hand": -1, "held": -1},
        ("balance_held_whole",),
    ),
    Attack("balance_held_whole", "inventory_balance", {"held": -1}),
    *_whole("balance_seq_whole", "inventory_balance", "seq", 0),
    Attack("balance_held_not_over", "inventory_balance", {"on_hand": 9, "held": 10}),
    Attack("reservation_state_known", "inventory_reservation", {"state": "half"}),
    Attack("hold_state_known", "inventory_hold", {"state": "lost"}),
    *_whole("hold_amount_whole", "inventory_hold", "amount", 1)[1:],
    Attack("hold_amount_whole", "inventory_hold", {"amount": 0, "used": 0, "given_back": 0}),
    Attack("hold_used_whole", "inventory_hold", {"used": -1, "given_back": 11}),
    Attack("hold_given_back_whole", "inventory_hold", {"used": 11, "given_back": -1}),
    Attack("hold_not_over", "inventory_hold", {"used": 5, "given_back": 6, "state": "open"}),
    *[
        Attack("hold_closed_is_settled", "inventory_hold", {"used": 4, "given_back": 5, "state": s})
        for s in ("used", "released", "lapsed", "cancelled")
    ],
    Attack(
        "movement_kind_known", MOVEMENT, {"kind": "gift"},
        ("movement_hold_fits_kind", "movement_sign_fits_kind"),
    ),
    Attack("movement_seq_whole", MOVEMENT, {"seq": 0}),
    Attack("movement_seq_whole", MOVEMENT, {"seq": TOO_MUCH}),
    Attack(
        "movement_on_hand_whole", MOVEMENT, {"on_hand_after": -1, "held_after": -1},
        ("movement_held_whole",),
    ),
    Attack("movement_on_hand_whole", MOVEMENT, {"on_hand_after": TOO_MUCH}),
    Attack("movement_held_whole", MOVEMENT, {"held_after": -1}),
    Attack("movement_change_whole", MOVEMENT, {"on_hand_change": TOO_MUCH}),
    Attack("movement_change_whole", MOVEMENT, {"kind": "use", "on_hand_change": -TOO_MUCH}),
    Attack("movement_hold_whole", MOVEMENT, _held("hold", 0, 1, TOO_MUCH)),
    Attack("movement_hold_whole", MOVEMENT, _held("release", 0, 1, -TOO_MUCH)),
    *_whole("movement_moles_whole", MOVEMENT, "amount_nmol", 0),
    Attack("movement_held_not_over", MOVEMENT, {"held_after": 100_006}),
    *[
        Attack("movement_sign_fits_kind", MOVEMENT, _held(kind, change, 0, 0))
        for kind, change in [
            *[(kind, sign) for kind in KINDS_UP for sign in (0, -1)],
            *[(kind, sign) for kind in KINDS_DOWN for sign in (0, 1)],
        ]
    ],
    *[
        Attack("movement_sign_fits_kind", MOVEMENT, _held(kind, 1, 1, held))
        for kind, held in (("hold", 1), ("release", -1), ("lapse", -1), ("transfer", 0))
    ],
    Attack("movement_hold_fits_kind", MOVEMENT, _held("hold", 0, 0, 0)),
    Attack("movement_hold_fits_kind", MOVEMENT, _held("hold", 0, 0, -1)),
    *[
        Attack("movement_hold_fits_kind", MOVEMENT, _held(kind, 0, 1, change))
        for kind in ("release", "lapse") for change in (0, 1)
    ],
    *[Attack("movement_hold_fits_kind", MOVEMENT, _held(k, -1, 1, 1)) for k in
      ("use", "loss", "disposal", "correction", "decant_out")],
    *[Attack("movement_hold_fits_kind", MOVEMENT, _held(k, 1, 1, 1)) for k in KINDS_UP],
    Attack("movement_hold_fits_kind", MOVEMENT, _held("transfer", 0, 1, 1)),
    Attack("procedure_state_known", PROCEDURE, {"state": "lost"}),
    Attack("procedure_phase_known", PROCEDURE, {"phase": "dreaming"}),
    Attack("procedure_has_one_scale", PROCEDURE, {"acceptor_amount_mmol": 1}),
    Attack("procedure_has_one_scale", PROCEDURE, {"product_mass_mg": None}),
    Attack("procedure_has_one_scale", PROCEDURE, {"product_mass_mg": 0}),
    Attack(
        "procedure_has_one_scale", PROCEDURE,
        {"product_mass_mg": None, "acceptor_amount_mmol": -1},
    ),
    *[Attack("procedure_planned_holds", PROCEDURE, {"state": s}) for s in
      ("planned", "approved", "running")],
    Attack(
        "procedure_planned_holds", PROCEDURE,
        {"state": "planned", "reservation_code": uuid.UUID(int=9).hex},
    ),
    *[
        Attack(f"{table}.{column} not negative", table, {column: -1})
        for table, column in [
            ("base_rememberedanswer", "status"), ("base_outboxmessage", "attempts"),
            ("base_outboxmessage", "sends"), (PROCEDURE, "broken_off"),
            ("inventory_reservation", "version"), ("inventory_hold", "line"),
            ("inventory_bottle", "version"), ("inventory_substance", "version"),
            ("inventory_quota", "version"), ("inventory_notice", "line"), (MOVEMENT, "part"),
            (PROCEDURE, "attempt"), (PROCEDURE, "version"), ("procedures_document", "attempt"),
        ]
    ],
]  # fmt: skip

# constraint or "table.column unique" -> the table and the columns a second row repeats
UNIQUES = {
    "membership_once": ("base_membership", ("person_id", "project_id")),
    "remembered_answer_once": ("base_rememberedanswer", ("person_id", "route", "key")),
    "login_count_once": ("base_logincount", ("kind", "digest", "quarter")),
    "seal_run_once": ("base_sealrun", ("book", "subject", "last")),
    "form_once": ("inventory_form", ("substance_id", "label")),
    "hold_line_once": ("inventory_hold", ("reservation_id", "line")),
    "movement_seq_once": (MOVEMENT, ("bottle_id", "seq")),
    "movement_operation_once": (MOVEMENT, ("operation", "part")),
    "quota_once": ("inventory_quota", ("project_id", "substance_id", "starts_on", "ends_on")),
    "document_attempt_once": ("procedures_document", ("procedure_id", "attempt")),
    "base_person.code unique": ("base_person", ("code",)),
    "base_project.code unique": ("base_project", ("code",)),
    "base_apitoken.digest unique": ("base_apitoken", ("digest",)),
    "inventory_place.code unique": ("inventory_place", ("code",)),
    "inventory_substance.code unique": ("inventory_substance", ("code",)),
    "inventory_substance.inchikey unique": ("inventory_substance", ("inchikey",)),
    "inventory_bottle.code unique": ("inventory_bottle", ("code",)),
    "inventory_reservation.code unique": ("inventory_reservation", ("code",)),
    f"{PROCEDURE}.code unique": (PROCEDURE, ("code",)),
    f"{PROCEDURE}.reservation_code unique": (PROCEDURE, ("reservation_code",)),
}

WHOLE_COLUMNS = [
    ("login_count_quarter_whole", "base_logincount", "quarter"),
    ("login_count_attempts_whole", "base_logincount", "attempts"),
    *[(f"seal_{column}_whole", "base_seal", column) for column in ("number", "runs", "rows")],
    *[(f"seal_run_{column}_whole", "base_sealrun", column)
      for column in ("subject", "first", "last")],
    ("bottle_heel_whole", "inventory_bottle", "heel"),
    ("bottle_least_whole", "inventory_bottle", "least_dispensed"),
    ("bottle_tare_whole", "inventory_bottle", "tare_ug"),
    ("substance_minimum_whole", "inventory_substance", "minimum"),
    ("quota_amount_whole", "inventory_quota", "amount"),
    ("balance_on_hand_whole", "inventory_balance", "on_hand"),
    ("balance_held_whole", "inventory_balance", "held"),
    ("balance_seq_whole", "inventory_balance", "seq"),
    ("hold_amount_whole", "inventory_hold", "amount"),
    ("hold_used_whole", "inventory_hold", "used"),
    ("hold_given_back_whole", "inventory_hold", "given_back"),
    *[(f"movement_{name}_whole", MOVEMENT, column) for name, column in [
        ("seq", "seq"), ("on_hand", "on_hand_after"), ("held", "held_after"),
        ("change", "on_hand_change"), ("hold", "held_change"), ("moles", "amount_nmol"),
    ]],
]  # fmt: skip
DECIMAL_COLUMNS = [
    ("inventory_form", "hydrate_water", {"kind": "hydrate"}),
    ("inventory_form", "solution_value", {"kind": "solution", "solution_basis": "mol_per_l"}),
    ("inventory_form", "active_share_pct", {"kind": "anomer_mixture"}),
    ("inventory_bottle", "assay_pct", {}),
    ("inventory_bottle", "density_g_per_ml", {}),
    ("inventory_reading", "value", {}),
    (PROCEDURE, "product_mass_mg", {}),
    (PROCEDURE, "acceptor_amount_mmol", {"product_mass_mg": None}),
]


def _all_constraints() -> set[str]:
    """Names in the models; columns for what the models leave unnamed."""
    names = set()
    for model in apps.get_models():
        if model._meta.app_label not in APPS:
            continue
        table = model._meta.db_table
        names |= {constraint.name for constraint in model._meta.constraints}
        for column in model._meta.concrete_fields:
            if column.unique and not column.primary_key:
                names.add(f"{table}.{column.column} unique")
            if isinstance(column, models.PositiveIntegerField | models.PositiveSmallIntegerField):
                names.add(f"{table}.{column.column} not negative")
    return names


def _refusal(attack_row: dict[str, Any], table: str) -> str:
    """What the database says to a row; the row must not be there afterwards."""
    before = rows_of(f'SELECT count(*) FROM "{table}"')
    with pytest.raises(IntegrityError) as refused, transaction.atomic():
        insert(table, attack_row)
    assert rows_of(f'SELECT count(*) FROM "{table}"') == before
    diagnosis = getattr(refused.value.__cause__, "diag", None)
    return str(diagnosis.constraint_name) if diagnosis else str(refused.value)


def test_every_constraint_of_the_models_is_attacked_here() -> None:
    assert {attack.constraint for attack in CHECKS} | set(UNIQUES) == _all_constraints()


def test_every_attacked_constraint_is_in_the_database_by_its_name() -> None:
    with connection.cursor() as cursor:
        found = {
            name
            for table in TABLES
            for name in connection.introspection.get_constraints(cursor, table)
        }
    named = {name for name in _all_constraints() if "." not in name}
    assert named - found == set()


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize("table", TABLES)
def test_a_sound_row_is_taken(table: str) -> None:
    row = _sound_row(table)
    before = rows_of(f'SELECT count(*) FROM "{table}"')[0][0]
    with transaction.atomic():
        insert(table, row)
        assert rows_of(f'SELECT count(*) FROM "{table}"')[0][0] == before + 1
        transaction.set_rollback(True)


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize("attack", CHECKS, ids=str)
def test_a_check_refuses(attack: Attack) -> None:
    said = _refusal({**_sound_row(attack.table), **attack.changes}, attack.table)
    if "." not in attack.constraint:
        assert any(name in said for name in (attack.constraint, *attack.or_by))
    else:
        [column] = attack.changes
        assert column in said


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize("name", UNIQUES)
def test_a_second_row_with_the_same_key_is_refused(name: str) -> None:
    table, columns = UNIQUES[name]
    first, second = _sound_row(table), _sound_row(table)
    if "reservation_code" in columns:
        first["reservation_code"] = uuid.UUID(int=8).hex
    if "operation" in columns:
        second |= {"seq": 3, "on_hand_after": 100_010}  # it carries on; only the operation repeats
    with transaction.atomic():
        insert(table, first)
        said = _refusal({**second, **{column: first[column] for column in columns}}, table)
        transaction.set_rollback(True)
    if ON_POSTGRESQL and "." not in name:
        assert said == name
    else:
        assert all(column in said for column in columns)


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize(("constraint", "table", "column"), WHOLE_COLUMNS)
def test_text_is_no_amount(constraint: str, table: str, column: str) -> None:
    row = {**_sound_row(table), column: "abc"}
    if ON_POSTGRESQL:
        with pytest.raises(DataError, match="abc"), transaction.atomic():
            insert(table, row)
    else:
        assert constraint in _refusal(row, table)


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize(("constraint", "table", "column"), WHOLE_COLUMNS)
def test_half_a_base_unit_is_never_stored(constraint: str, table: str, column: str) -> None:
    sound = _sound_row(table)
    row = {**sound, column: float(sound[column]) + 0.5}
    if not ON_POSTGRESQL:
        said = _refusal(row, table)
        assert "CHECK constraint failed" in said or constraint in said
        return
    # The column's type rounds; what is stored is a whole number, or another rule refuses it.
    with suppress(IntegrityError), transaction.atomic():
        insert(table, row)
        stored = rows_of(f'SELECT DISTINCT "{column}" FROM "{table}"')
        assert all(isinstance(value, int) for (value,) in stored if value is not None)
        transaction.set_rollback(True)
    column_type = rows_of(
        "SELECT data_type FROM information_schema.columns "
        "WHERE table_name = %s AND column_name = %s",
        (table, column),
    )
    assert column_type == [("bigint",)]


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize(("table", "column", "other"), DECIMAL_COLUMNS)
def test_text_is_no_decimal(table: str, column: str, other: dict[str, Any]) -> None:
    row = {**_sound_row(table), **other, column: "abc"}
    if ON_POSTGRESQL:
        with pytest.raises(DataError, match="abc"), transaction.atomic():
            insert(table, row)
    else:
        assert "CHECK constraint failed" in _refusal(row, table)


@pytest.mark.usefixtures("_stock")
@pytest.mark.parametrize(
    ("table", "column", "where"),
    [
        ("inventory_balance", "held", "bottle_id IN (SELECT id FROM inventory_bottle)"),
        ("inventory_hold", "used", "used = 0"),
    ],
)
def test_a_check_refuses_an_update_too(table: str, column: str, where: str) -> None:
    before = rows_of(f'SELECT * FROM "{table}" ORDER BY 1')
    with pytest.raises(IntegrityError), transaction.atomic():
        rows_of(f'UPDATE "{table}" SET "{column}" = 100001 WHERE {where} RETURNING 1')
    assert rows_of(f'SELECT * FROM "{table}" ORDER BY 1') == before
    assert Hold.objects.get().used == 0
    assert Movement.objects.count() == 3
