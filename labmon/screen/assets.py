"""Hashed static files, ES module imports rewritten too."""

from whitenoise.storage import CompressedManifestStaticFilesStorage


class HashedStorage(CompressedManifestStaticFilesStorage):
    """Names carry a digest of the content; a file that no page collected is an error in tests, not at night."""

    support_js_module_import_aggregation = True
    manifest_strict = False
