from django.apps import AppConfig


class ProceduresConfig(AppConfig):
    name = "labplan.procedures"
    label = "procedures"

    def ready(self) -> None:
        from labplan.procedures import tasks  # noqa: F401 - registers the outbox handlers
