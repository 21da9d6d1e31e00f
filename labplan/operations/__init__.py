"""Running labplan: serving, health, metrics, backup, moving to another database."""
