"""The WSGI application, for any WSGI server."""

import os

from django.core.wsgi import get_wsgi_application

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labplan.settings.default")
application = get_wsgi_application()
