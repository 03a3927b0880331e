"""The WSGI application, served by waitress in both run modes."""

from __future__ import annotations

import os
import threading

from django.core.wsgi import get_wsgi_application

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")


def _warm() -> None:
    """Importing the plotting library takes over a second; the first person at a bench should not wait for it."""
    import bokeh.embed
    import bokeh.plotting  # noqa: F401


application = get_wsgi_application()

from labsite.trail.triggers import require_triggers  # noqa: E402 - models are there only now

require_triggers()  # a database in which records could be changed unnoticed is not served
threading.Thread(target=_warm, name="warm-up", daemon=True).start()
