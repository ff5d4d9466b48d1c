"""The WSGI entry that the web server loads: `config.wsgi:application`."""

from __future__ import annotations

import os

from django.core.wsgi import get_wsgi_application

from analysis.methods.warm import compile_all

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "config.settings")

application = get_wsgi_application()

# A past answer may be computed while a reader waits; loading the compiled kernels now keeps that wait short.
compile_all()
