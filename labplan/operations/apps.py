from django.apps import AppConfig


class OperationsConfig(AppConfig):
    name = "labplan.operations"
    label = "operations"
