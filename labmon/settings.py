"""The one settings module. Every ``LABMON_`` variable is listed with unit and default in docker/env.example."""

import os
from pathlib import Path
from zoneinfo import ZoneInfo

from ingest.mqtt.address import broker_address
from labmon.env import Env, parse_bool, parse_options, parse_positive, parse_words, parse_zone
from labmon.services import django_database, find_services

BASE_DIR = Path(__file__).resolve().parent.parent
env = Env(os.environ, prefix="LABMON_")

DATA_DIR = env.get("DATA", Path, default=BASE_DIR / "lab-data").absolute()
LISTEN = env.get("LISTEN", str, default="127.0.0.1")
PORT = int(env.get("PORT", parse_positive, default=8000))
DEBUG = env.get("DEBUG", parse_bool, default=False)
_services = find_services(os.environ, DATA_DIR)


def _secret_key() -> str:
    """From the environment, else made once and kept in the data folder, else for this process only."""
    import secrets

    kept = DATA_DIR / "secret-key"
    if kept.is_file():
        return kept.read_text().strip()
    return secrets.token_urlsafe(50)


SECRET_KEY = env.get("SECRET_KEY", str, default="") or _secret_key()
IS_SECRET_KEY_KEPT = bool(os.environ.get("LABMON_SECRET_KEY")) or (DATA_DIR / "secret-key").is_file()
ALLOWED_HOSTS = ["localhost", "127.0.0.1", "[::1]", *env.get("HOSTS", parse_words, default=[])]
CSRF_TRUSTED_ORIGINS = env.get("ORIGINS", parse_words, default=[])
TRUSTED_PROXIES = env.get("PROXIES", parse_words, default=["127.0.0.1"])
IS_BEHIND_TLS = env.get("BEHIND_TLS", parse_bool, default=False)

INSTALLED_APPS = [
    "django.contrib.auth",
    "django.contrib.contenttypes",
    "django.contrib.sessions",
    "django.contrib.messages",
    "django.contrib.staticfiles",
    "django.contrib.postgres",
    "channels",
    "ingest",
    "analysis",
    "labmon",
]
MIDDLEWARE = [
    "labmon.screen.headers.ContentSecurityPolicy",
    "django.middleware.security.SecurityMiddleware",
    "django.middleware.clickjacking.XFrameOptionsMiddleware",
    "whitenoise.middleware.WhiteNoiseMiddleware",
    "django.contrib.sessions.middleware.SessionMiddleware",
    "django.middleware.common.CommonMiddleware",
    "django.middleware.csrf.CsrfViewMiddleware",
    "django.contrib.auth.middleware.AuthenticationMiddleware",
    "django.contrib.messages.middleware.MessageMiddleware",
]
ROOT_URLCONF = "labmon.urls"
ASGI_APPLICATION = "labmon.asgi.application"
TEMPLATES = [{
    "BACKEND": "django.template.backends.django.DjangoTemplates",
    "DIRS": [BASE_DIR / "templates"],
    "APP_DIRS": True,
    "OPTIONS": {"context_processors": [
        "django.template.context_processors.request",
        "django.contrib.auth.context_processors.auth",
        "django.contrib.messages.context_processors.messages",
        "labmon.screen.frame.frame",
    ]},
}]

# An unknown address is not a fault here: `check` reports it (labmon.E001), and commands that need none still run.
DATABASES = {"default": django_database(_services.database_url or "postgresql://nobody@127.0.0.1:9/labmon")}
BROKER_URL = _services.broker_url or "redis://127.0.0.1:9/0"
HAS_SERVICES = bool(_services.database_url and _services.broker_url)
DEFAULT_AUTO_FIELD = "django.db.models.BigAutoField"

AUTH_USER_MODEL = "labmon.Person"
CSRF_FAILURE_VIEW = "labmon.screen.faults.no_token"
LOGIN_URL = "login"
LOGIN_REDIRECT_URL = "lab"
LOGOUT_REDIRECT_URL = "login"
PASSWORD_HASHERS = [  # the first makes new ones; a password kept by the second is made anew at the next sign-in
    "django.contrib.auth.hashers.Argon2PasswordHasher",
    "django.contrib.auth.hashers.PBKDF2PasswordHasher",
]
AUTH_PASSWORD_VALIDATORS = [
    {"NAME": "django.contrib.auth.password_validation.MinimumLengthValidator", "OPTIONS": {"min_length": 10}},
    {"NAME": "django.contrib.auth.password_validation.CommonPasswordValidator"},
]
SESSION_COOKIE_AGE = 14 * 24 * 3600
SESSION_COOKIE_SECURE = CSRF_COOKIE_SECURE = IS_BEHIND_TLS
SESSION_COOKIE_HTTPONLY = True
SESSION_COOKIE_SAMESITE = CSRF_COOKIE_SAMESITE = "Lax"  # Strict would sign out whoever comes by the link in a mail
X_FRAME_OPTIONS = "DENY"
SECURE_HSTS_SECONDS = 30 * 24 * 3600 if IS_BEHIND_TLS else 0
SILENCED_SYSTEM_CHECKS = [
    "security.W005", "security.W021",  # what the lab's other hosts do, and browsers' lists, is for the lab to decide
    "security.W008",                   # the proxy before labmon redirects; the supervisor's own probes come without TLS
]
SECURE_PROXY_SSL_HEADER = ("HTTP_X_FORWARDED_PROTO", "https") if IS_BEHIND_TLS else None

BROKER_PREFIX = env.get("BROKER_PREFIX", str, default="labmon")   # so that several labs may share one broker
MQTT_BROKER = env.get("MQTT_URL", broker_address, default=None)
MQTT_ACCESS_DIR = env.get("MQTT_ACCESS", Path, default=None)
MQTT_PID_FILE = env.get("MQTT_PID_FILE", Path, default=None)
CHANNEL_LAYERS = {"default": {
    "BACKEND": "channels_redis.pubsub.RedisPubSubChannelLayer",
    "CONFIG": {"hosts": [BROKER_URL.replace("redis+socket://", "unix://")], "prefix": BROKER_PREFIX},
}}

CELERY_BROKER_URL = BROKER_URL
CELERY_TASK_DEFAULT_QUEUE = BROKER_PREFIX
CELERY_TASK_ROUTES = ["labmon.pipeline.lanes.route"]
CELERY_BEAT_SCHEDULER = "labmon.engines.beat:OneBeatScheduler"
CELERY_TASK_IGNORE_RESULT = True
CELERY_TASK_ACKS_LATE = True
CELERY_TASK_TIME_LIMIT = 300
CELERY_BROKER_CONNECTION_RETRY_ON_STARTUP = True
CELERY_BROKER_TRANSPORT_OPTIONS = {"visibility_timeout": 3600, "socket_connect_timeout": 2}
CELERY_WORKER_PREFETCH_MULTIPLIER = 1
CELERY_WORKER_HIJACK_ROOT_LOGGER = False

USE_TZ = True
TIME_ZONE = "UTC"
LAB_ZONE = env.get("ZONE", parse_zone, default=ZoneInfo("UTC"))
LANGUAGE_CODE = "en-gb"
STATIC_URL = "static/"
STATIC_ROOT = env.get("STATIC", Path, default=DATA_DIR / "static")
STORAGES = {
    "default": {"BACKEND": "django.core.files.storage.FileSystemStorage"},
    "staticfiles": {"BACKEND": "labmon.screen.assets.HashedStorage"},
    "days": {"BACKEND": env.get("DAYS_STORAGE", str, default="ingest.store.days.storage.DayFolder"),
             "OPTIONS": env.get("DAYS_OPTIONS", parse_options, default={"location": str(DATA_DIR / "days")})},
}
MEDIA_ROOT = DATA_DIR / "files"
WATCHED_FOLDER = env.get("WATCHED_FOLDER", Path, default=None)

EMAIL_BACKEND = env.get("MAIL_BACKEND", str, default=(
    "django.core.mail.backends.smtp.EmailBackend" if os.environ.get("LABMON_MAIL_HOST")
    else "django.core.mail.backends.console.EmailBackend"))
EMAIL_HOST = env.get("MAIL_HOST", str, default="localhost")
EMAIL_PORT = int(env.get("MAIL_PORT", parse_positive, default=25))
EMAIL_HOST_USER = env.get("MAIL_USER", str, default="")
EMAIL_HOST_PASSWORD = env.get("MAIL_PASSWORD", str, default="")
EMAIL_USE_TLS = env.get("MAIL_TLS", parse_bool, default=False)
EMAIL_TIMEOUT = env.get("MAIL_TIMEOUT_S", parse_positive, default=10.0)
DEFAULT_FROM_EMAIL = env.get("MAIL_FROM", str, default="labmon@localhost")
PUSH_LOCAL = env.get("PUSH_LOCAL", parse_bool, default=False)   # push services on this machine, without TLS: for trials only
DOOR_URL = env.get("DOOR_URL", str, default="")
PUBLIC_URL = env.get("PUBLIC_URL", str, default="http://127.0.0.1:8000")
DATA_UPLOAD_MAX_MEMORY_SIZE = 8 * 2**20
FILE_UPLOAD_MAX_MEMORY_SIZE = 2 * 2**20
LOGGING = {
    "version": 1,
    "disable_existing_loggers": False,
    "formatters": {"line": {"()": "labmon.log.LineFormatter"}},
    "handlers": {"stderr": {"class": "logging.StreamHandler", "formatter": "line"}},
    "root": {"handlers": ["stderr"], "level": env.get("LOG_LEVEL", str, default="INFO")},
    "loggers": {"django.request": {"level": "ERROR"},
                **{name: {"level": "ERROR"} for name in ("weasyprint", "weasyprint.progress", "fontTools")},
                **{name: {"level": "WARNING"} for name in ("celery.app.trace", "celery.worker.strategy", "celery.beat")}},
}
env.finish()
