from django.apps import AppConfig


class InventoryConfig(AppConfig):
    name = "inventory"

    def ready(self) -> None:
        from inventory.triggers import book_triggers
        from labplan.base.append_only import register_triggers

        register_triggers(book_triggers)
