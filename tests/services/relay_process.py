"""labplan's own relay on the tests' clock: python -m tests.services.relay_process"""

import django
from django.core.management import call_command

if __name__ == "__main__":
    django.setup()
    from tests.services.clocked import move_clock

    move_clock()
    call_command("outbox_relay")
