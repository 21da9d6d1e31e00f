from django.apps import AppConfig


class InventoryConfig(AppConfig):
    name = "inventory"

    def ready(self) -> None:
        from inventory.models import Movement
        from inventory.triggers import book_triggers
        from labplan.base.append_only import register_triggers
        from labplan.base.seal import Book, register_book

        register_triggers(book_triggers)
        register_book(Book("stock", Movement, subject="bottle", number="seq", row_word="line"))
