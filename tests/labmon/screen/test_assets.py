"""Static files as they are served: hashed names everywhere, one version of the plotting library, small scripts."""

import re
from pathlib import Path

import brotli
import pytest
from django.contrib.staticfiles.management.commands.collectstatic import Command
from django.test import override_settings
from plotly.offline import get_plotlyjs_version

STATIC = Path(__file__).resolve().parents[3] / "labmon" / "static" / "labmon"


@pytest.fixture(scope="module")
def served(tmp_path_factory) -> Path:
    """The folder that collectstatic makes; uncompressed here, for brotli at its best takes seconds."""
    folder = tmp_path_factory.mktemp("static")
    command = Command()
    with override_settings(STATIC_ROOT=str(folder), STORAGES={
            "default": {"BACKEND": "django.core.files.storage.FileSystemStorage"},
            "staticfiles": {"BACKEND": "tests.labmon.screen.test_assets.Uncompressed"}}):
        from django.core.management import call_command

        call_command(command, interactive=False, verbosity=0)
    return folder / "labmon"


from labmon.screen.assets import HashedStorage  # noqa: E402


class Uncompressed(HashedStorage):
    """The same storage without its last step."""

    def compress_files(self, paths):
        return iter(())


def test_every_served_module_imports_hashed_names_only(served):
    modules = [path for path in (served / "js").glob("*.js") if re.search(r"\.[0-9a-f]{12}\.js$", path.name)]
    assert len(modules) == len(list((STATIC / "js").glob("*.js")))
    for module in modules:
        for imported in re.findall(r"""from ['"]([^'"]+)['"]""", module.read_text()):
            assert re.fullmatch(r"\./[\w-]+\.[0-9a-f]{12}\.js", imported), (module.name, imported)
            assert (module.parent / imported).is_file()


def test_modules_are_at_most_two_imports_deep():
    imports = {path.name: re.findall(r"from '\./([\w-]+\.js)'", path.read_text()) for path in (STATIC / "js").glob("*.js")}

    def depth(name: str) -> int:
        return 1 + max((depth(other) for other in imports[name]), default=0)

    assert max(depth(name) for name in imports) <= 3          # the entry and two below it


def test_own_scripts_of_a_page_stay_small():
    """SCREENS budget: 15 kB brotli of own script a page; the station page has the most."""
    page = ["main.js", "live.js", "format.js", "history.js", "runs.js", "trail.js", "sphere.js"]
    assert sum(len(brotli.compress((STATIC / "js" / name).read_bytes())) for name in page) <= 15_000


def test_the_vendored_plotting_library_is_the_python_packages_version():
    head = (STATIC / "vendor" / "plotly-cartesian.min.js").read_text()[:300]
    assert f"v{get_plotlyjs_version()}" in head


def test_no_script_evaluates_text_or_reaches_out():
    for path in (STATIC / "js").glob("*.js"):
        text = path.read_text().replace("'http://www.w3.org/2000/svg'", "")
        assert not re.search(r"\beval\(|new Function|https?://|innerHTML = `", text), path.name
