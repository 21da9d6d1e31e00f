"""Run one of labplan's commands: `python manage.py help` lists them."""

import os
import sys


def main() -> None:
    # The demo empties its database, so it never runs on the one a laboratory works with.
    kind = "demo" if sys.argv[1:2] == ["demo"] else "default"
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", f"labplan.settings.{kind}")
    try:
        from django.core.management import execute_from_command_line
    except ImportError:
        sys.exit("Django is not installed here: `make help` says how labplan is set up.")
    from django.core.exceptions import ImproperlyConfigured

    try:
        execute_from_command_line(sys.argv)
    except ImproperlyConfigured as error:
        sys.exit(str(error))


if __name__ == "__main__":
    main()
