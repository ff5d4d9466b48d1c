"""Settings of the service: one module, driven by the environment, safe when nothing is set.

Every variable is read through `config.environment`. What a production installation must set: SECRET_KEY,
DATABASE_URL, CELERY_BROKER_URL, STEELYARD_HOSTS. The service runner (`python -m config.services`) writes the
first two into the data folder for a local installation; there is no default for either in the code.
"""

from __future__ import annotations

from typing import Any
from urllib.parse import urlsplit

from django.core.exceptions import ImproperlyConfigured
from django.utils.csp import CSP
from psycopg.conninfo import conninfo_to_dict

from config import environment

BASE_DIR = environment.PROJECT_FOLDER
DATA_FOLDER = environment.data_folder()

# --- What must be decided per installation -----------------------------------------------------------------

DEBUG = environment.flag("STEELYARD_DEBUG", default=False)

SECRET_KEY = environment.text_or_file(
    "SECRET_KEY",
    DATA_FOLDER / "secret-key",
    remedy="set it, or run `make demo` once to generate a local one.",
)

# Safe by default: without STEELYARD_HTTPS=0 (set by the local runner) cookies are secure, HTTP is refused.
SERVED_OVER_HTTPS = environment.flag("STEELYARD_HTTPS", default=True)
# Only behind a proxy that always sets this header itself; otherwise any client could claim to use HTTPS.
BEHIND_TRUSTED_PROXY = environment.flag("STEELYARD_TRUST_FORWARDED_PROTO", default=False)

ALLOWED_HOSTS = environment.words("STEELYARD_HOSTS", default="localhost,127.0.0.1,[::1]")
CSRF_TRUSTED_ORIGINS = environment.words("STEELYARD_TRUSTED_ORIGINS")

# --- Applications ------------------------------------------------------------------------------------------

INSTALLED_APPS = [
    "django.contrib.admin",
    "django.contrib.auth",
    "django.contrib.contenttypes",
    "django.contrib.sessions",
    "django.contrib.messages",
    "django.contrib.staticfiles",
    "django.contrib.postgres",
    "rest_framework",
    "drf_spectacular",
    "evidence.apps.EvidenceConfig",
    "analysis.apps.AnalysisConfig",
    "api.apps.ApiConfig",
    "dashboard.apps.DashboardConfig",
]

MIDDLEWARE = [
    "django.middleware.security.SecurityMiddleware",
    "whitenoise.middleware.WhiteNoiseMiddleware",
    "django.middleware.csp.ContentSecurityPolicyMiddleware",
    "django.contrib.sessions.middleware.SessionMiddleware",
    "django.middleware.common.CommonMiddleware",
    "django.middleware.csrf.CsrfViewMiddleware",
    "django.contrib.auth.middleware.AuthenticationMiddleware",
    "django.contrib.messages.middleware.MessageMiddleware",
    "django.middleware.clickjacking.XFrameOptionsMiddleware",
]

ROOT_URLCONF = "config.urls"
WSGI_APPLICATION = "config.wsgi.application"
APPEND_SLASH = False
DEFAULT_AUTO_FIELD = "django.db.models.BigAutoField"

TEMPLATES = [
    {
        "BACKEND": "django.template.backends.django.DjangoTemplates",
        "DIRS": [],
        "APP_DIRS": True,
        "OPTIONS": {
            "context_processors": [
                "django.template.context_processors.request",
                "django.contrib.auth.context_processors.auth",
                "django.contrib.messages.context_processors.messages",
            ],
        },
    },
]

# --- Database ----------------------------------------------------------------------------------------------

STATEMENT_TIMEOUT_SECONDS = environment.whole_number("STEELYARD_STATEMENT_TIMEOUT_SECONDS", default=60)
IDLE_TRANSACTION_TIMEOUT_SECONDS = 300
# The role that web server and worker act as once connected: one that cannot rewrite history (`evidence.privileges`).
# Migrations run without it, as the tables' owner.
DATABASE_ROLE = environment.text("STEELYARD_DATABASE_ROLE")


def database_from_url(url: str) -> dict[str, Any]:
    """Django's description of a PostgreSQL database from a connection URI as PostgreSQL itself reads it.

    Parameters of the URI that Django has no name for (`sslmode`, `target_session_attrs`, …) are handed on.
    """
    if urlsplit(url).scheme not in {"postgres", "postgresql"}:
        raise ImproperlyConfigured("DATABASE_URL must begin with postgresql:// (no other database is supported).")
    parts: dict[str, Any] = dict(conninfo_to_dict(url))
    session = (
        f"-c statement_timeout={STATEMENT_TIMEOUT_SECONDS}s"
        f" -c idle_in_transaction_session_timeout={IDLE_TRANSACTION_TIMEOUT_SECONDS}s"
    )
    described = {
        "ENGINE": "django.db.backends.postgresql",
        "NAME": parts.pop("dbname", ""),
        "USER": parts.pop("user", ""),
        "PASSWORD": parts.pop("password", ""),
        "HOST": parts.pop("host", ""),
        "PORT": str(parts.pop("port", "")),
        # One connection kept per thread measured as fast as a pool and needs no threads of its own, which
        # would not survive the forks of the web server and the worker.
        "CONN_MAX_AGE": 60,
        "CONN_HEALTH_CHECKS": True,
        # An operation declares its own transaction as durable, which a request-wide one would forbid.
        "ATOMIC_REQUESTS": False,
    }
    options = " ".join(filter(None, [parts.pop("options", ""), session]))
    described["OPTIONS"] = parts | {"options": options, "application_name": "steelyard"}
    if DATABASE_ROLE:
        described["OPTIONS"]["assume_role"] = DATABASE_ROLE
    return described


DATABASES = {
    "default": database_from_url(
        environment.text_or_file(
            "DATABASE_URL",
            DATA_FOLDER / "database-url",
            remedy="set it, or start the embedded database with `make demo`.",
        )
    )
}

# --- People and sign-in ------------------------------------------------------------------------------------

AUTH_USER_MODEL = "evidence.Person"
PASSWORD_HASHERS = [
    "django.contrib.auth.hashers.Argon2PasswordHasher",
    "django.contrib.auth.hashers.PBKDF2PasswordHasher",
]
AUTH_PASSWORD_VALIDATORS = [
    {"NAME": "django.contrib.auth.password_validation.UserAttributeSimilarityValidator"},
    {"NAME": "django.contrib.auth.password_validation.MinimumLengthValidator", "OPTIONS": {"min_length": 12}},
    {"NAME": "django.contrib.auth.password_validation.CommonPasswordValidator"},
    {"NAME": "django.contrib.auth.password_validation.NumericPasswordValidator"},
]
# Who `manage.py load_demo` lets sign in to the invented scenario; without a password it makes one up and prints it.
DEMO_EMAIL = environment.text("STEELYARD_DEMO_EMAIL", "demo@steelyard.example")
DEMO_PASSWORD = environment.text("STEELYARD_DEMO_PASSWORD")
LOGIN_URL = "dashboard:sign-in"
LOGIN_REDIRECT_URL = "dashboard:home"
LOGOUT_REDIRECT_URL = "dashboard:sign-in"

SESSION_COOKIE_NAME = "steelyard_session"
SESSION_COOKIE_AGE = 12 * 60 * 60
SESSION_COOKIE_HTTPONLY = True
SESSION_COOKIE_SAMESITE = "Lax"
CSRF_COOKIE_SAMESITE = "Lax"
CSRF_FAILURE_VIEW = "config.errors.csrf_failure"

# --- What the browser is told ------------------------------------------------------------------------------

# Nothing inline and nothing from elsewhere: scripts, styles and figures are files of this service.
SECURE_CSP = {
    "default-src": [CSP.NONE],
    "script-src": [CSP.SELF],
    "style-src": [CSP.SELF],
    "img-src": [CSP.SELF, "data:"],
    "connect-src": [CSP.SELF],
    "font-src": [CSP.SELF],
    "base-uri": [CSP.NONE],
    "form-action": [CSP.SELF],
    "frame-ancestors": [CSP.NONE],
}
X_FRAME_OPTIONS = "DENY"
SECURE_REFERRER_POLICY = "same-origin"
SECURE_CONTENT_TYPE_NOSNIFF = True

SECURE_SSL_REDIRECT = SERVED_OVER_HTTPS
# Health probes come from inside, over plain HTTP.
SECURE_REDIRECT_EXEMPT = [r"^health/"]
SESSION_COOKIE_SECURE = SERVED_OVER_HTTPS
CSRF_COOKIE_SECURE = SERVED_OVER_HTTPS
SECURE_HSTS_SECONDS = 365 * 24 * 60 * 60 if SERVED_OVER_HTTPS else 0
SECURE_HSTS_INCLUDE_SUBDOMAINS = SERVED_OVER_HTTPS
SECURE_HSTS_PRELOAD = SERVED_OVER_HTTPS
SECURE_PROXY_SSL_HEADER = ("HTTP_X_FORWARDED_PROTO", "https") if BEHIND_TRUSTED_PROXY else None

# --- Static files ------------------------------------------------------------------------------------------

STATIC_URL = "/static/"
STATIC_ROOT = environment.text("STEELYARD_STATIC_ROOT", str(BASE_DIR / "staticfiles"))
# Hashed names let browsers keep a file for ever; they need `collectstatic` to have run, so tests go without.
HASHED_STATIC_FILES = environment.flag("STEELYARD_HASHED_STATIC", default=not DEBUG)
STORAGES = {
    "default": {"BACKEND": "django.core.files.storage.FileSystemStorage"},
    "staticfiles": {
        "BACKEND": (
            "whitenoise.storage.CompressedManifestStaticFilesStorage"
            if HASHED_STATIC_FILES
            else "django.contrib.staticfiles.storage.StaticFilesStorage"
        ),
    },
}
WHITENOISE_USE_FINDERS = not HASHED_STATIC_FILES

# --- Language and time -------------------------------------------------------------------------------------

LANGUAGE_CODE = "en-gb"
TIME_ZONE = "UTC"
USE_I18N = False
USE_TZ = True

# --- Limits on what may be sent ----------------------------------------------------------------------------

DATA_UPLOAD_MAX_MEMORY_SIZE = 5 * 1024 * 1024
DATA_UPLOAD_MAX_NUMBER_FIELDS = 2_000

# --- The REST service (the names are the api package's own) ------------------------------------------------

REST_FRAMEWORK = {
    "DEFAULT_AUTHENTICATION_CLASSES": [
        "api.authentication.TokenAuthentication",
        "api.authentication.SessionAuthentication",
    ],
    # Nothing is open by omission: a view without its own permission classes answers nobody.
    "DEFAULT_PERMISSION_CLASSES": ["api.permissions.DenyAll"],
    "DEFAULT_RENDERER_CLASSES": ["rest_framework.renderers.JSONRenderer"],
    "DEFAULT_PARSER_CLASSES": ["api.parsers.BoundedJSONParser"],
    "DEFAULT_SCHEMA_CLASS": "drf_spectacular.openapi.AutoSchema",
    "DEFAULT_METADATA_CLASS": None,
    "EXCEPTION_HANDLER": "api.problems.exception_handler",
    "UNAUTHENTICATED_USER": "django.contrib.auth.models.AnonymousUser",
    "URL_FORMAT_OVERRIDE": None,
    # NaN and infinities are not JSON: a number that is not finite must fail here rather than at a client.
    "STRICT_JSON": True,
    "TEST_REQUEST_DEFAULT_FORMAT": "json",
}
SPECTACULAR_SETTINGS = {
    "TITLE": "Steelyard",
    "DESCRIPTION": "A living evidence database: what research shows so far, how sure that is, what moved it.",
    "VERSION": "1",
    "OAS_VERSION": "3.1.1",
    "SERVE_INCLUDE_SCHEMA": False,
    "SCHEMA_PATH_PREFIX": r"/api/v1",
    # What comes in and what goes out have shapes of their own, and so has what a PATCH takes.
    "COMPONENT_SPLIT_REQUEST": False,
    "COMPONENT_SPLIT_PATCH": False,
    "ENUM_GENERATE_CHOICE_DESCRIPTION": False,
    "ENUM_NAME_OVERRIDES": {
        "DecisionEnum": "evidence.vocabularies.Decision.choices",
        "DecisionMadeEnum": "api.serializers.questions.DECISIONS",
        "MetricEnum": "evidence.vocabularies.METRIC_CHOICES",
        "PaperKindEnum": "evidence.vocabularies.PaperKind.choices",
        "ResolutionKindEnum": "evidence.vocabularies.ResolutionKind.choices",
    },
    "POSTPROCESSING_HOOKS": [
        "drf_spectacular.hooks.postprocess_schema_enums",
        "api.schema.complete",
    ],
}

# --- The job queue -----------------------------------------------------------------------------------------

QUEUE_FOLDER = DATA_FOLDER / "queue"
# Two installations may share a Redis or RabbitMQ if they name their queues differently.
QUEUE_NAME = environment.text("STEELYARD_QUEUE", "steelyard")
CELERY_BROKER_URL = environment.text("CELERY_BROKER_URL", "filesystem://")

_BROKER_OPTIONS: dict[str, dict[str, Any]] = {
    # The file-backed queue: one folder on this machine, polled often enough to feel immediate.
    "filesystem": {
        "data_folder_in": str(QUEUE_FOLDER / "messages"),
        "data_folder_out": str(QUEUE_FOLDER / "messages"),
        "control_folder": str(QUEUE_FOLDER / "control"),
        "polling_interval": 0.05,
    },
    # The visibility timeout stays above the longest task; the default restore pace would take many minutes.
    "redis": {
        "global_keyprefix": f"{QUEUE_NAME}:",
        "visibility_timeout": 3600,
        "unacked_restore_interval": 5,
        "unacked_restore_throttle": 1,
        "socket_connect_timeout": 2,
        "socket_timeout": 30,
        "socket_keepalive": True,
        "health_check_interval": 25,
    },
    "amqp": {"confirm_publish": True},
}


def broker_options(url: str) -> dict[str, Any]:
    """Transport options for the queue behind a URL: file-backed, Redis or RabbitMQ, and no other."""
    scheme = urlsplit(url).scheme
    kind = {"rediss": "redis", "amqps": "amqp", "pyamqp": "amqp"}.get(scheme, scheme)
    if kind not in _BROKER_OPTIONS:
        raise ImproperlyConfigured(
            f"CELERY_BROKER_URL begins with {scheme!r}; it must begin with filesystem://, redis:// or amqp://."
        )
    return _BROKER_OPTIONS[kind]


CELERY_BROKER_TRANSPORT_OPTIONS = broker_options(CELERY_BROKER_URL)
CELERY_BROKER_CONNECTION_RETRY_ON_STARTUP = True
CELERY_BROKER_CONNECTION_MAX_RETRIES = None
CELERY_BROKER_CONNECTION_TIMEOUT = 2
# A message is only a hint, sent after commit: with the queue down the caller goes on, the sweep rings later.
CELERY_TASK_PUBLISH_RETRY = False
CELERY_TASK_IGNORE_RESULT = True
CELERY_TASK_ACKS_LATE = True
CELERY_TASK_REJECT_ON_WORKER_LOST = True
CELERY_TASK_RETRY_ON_WORKER_LOST = True
CELERY_TASK_TIME_LIMIT = 900
CELERY_TASK_SOFT_TIME_LIMIT = 840
CELERY_TASK_DEFAULT_QUEUE = QUEUE_NAME
CELERY_TASK_SERIALIZER = "json"
CELERY_ACCEPT_CONTENT = ["json"]
# The file-backed queue would keep a file for every question asked of the workers.
CELERY_WORKER_ENABLE_REMOTE_CONTROL = not CELERY_BROKER_URL.startswith("filesystem:")
CELERY_WORKER_PREFETCH_MULTIPLIER = 1
CELERY_WORKER_MAX_TASKS_PER_CHILD = 200
CELERY_WORKER_SOFT_SHUTDOWN_TIMEOUT = 20
CELERY_WORKER_HIJACK_ROOT_LOGGER = False
CELERY_TIMEZONE = "UTC"
CELERY_BEAT_SCHEDULE_FILENAME = str(DATA_FOLDER / "schedule")

SWEEP_INTERVAL_SECONDS = environment.whole_number("STEELYARD_SWEEP_INTERVAL_SECONDS", default=5, minimum=1)
# A worker that has not been heard of for so long is given up, and its request offered to another.
RECOMPUTE_LEASE_SECONDS = environment.whole_number("STEELYARD_LEASE_SECONDS", default=120, minimum=1)
CELERY_BEAT_SCHEDULE = {
    "sweep": {
        "task": "analysis.tasks.sweep",
        "schedule": SWEEP_INTERVAL_SECONDS,
        # With no worker about, sweeps pile up in the queue; a late one has nothing to add.
        "options": {"expires": SWEEP_INTERVAL_SECONDS},
    },
    "forget-sign-in-failures": {"task": "analysis.tasks.forget_sign_in_failures", "schedule": 24 * 60 * 60},
}

# --- Logging -----------------------------------------------------------------------------------------------

# The file-backed queue has no host, and the transport warns at every connection that it makes one up.
QUEUE_LOG_LEVEL = "ERROR" if CELERY_BROKER_URL.startswith("filesystem:") else "WARNING"
LOGGING = {
    "version": 1,
    "disable_existing_loggers": False,
    "formatters": {"line": {"format": "%(asctime)s %(levelname)s %(name)s: %(message)s"}},
    "handlers": {"stderr": {"class": "logging.StreamHandler", "formatter": "line"}},
    "loggers": {"kombu.connection": {"level": QUEUE_LOG_LEVEL}},
    "root": {"handlers": ["stderr"], "level": environment.text("STEELYARD_LOG_LEVEL", "INFO")},
}
