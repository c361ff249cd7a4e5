"""Hashed static files, ES module imports rewritten too."""

from whitenoise.storage import CompressedManifestStaticFilesStorage


class HashedStorage(CompressedManifestStaticFilesStorage):
    """Names carry a digest of the content. A file that was not collected is an error in tests, not at night."""

    support_js_module_import_aggregation = True
    manifest_strict = False

    def stored_name(self, name: str) -> str:
        """The hashed name; the plain one where collectstatic has not run, so that a page without looks still reads."""
        try:
            return super().stored_name(name)
        except ValueError:
            return name
