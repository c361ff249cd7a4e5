"""Static files as they are served: hashed names everywhere, one version of the plotting library, small scripts."""

import re
from pathlib import Path

import brotli
import pytest
from plotly.offline import get_plotlyjs_version

from labmon.screen.assets import HashedStorage

STATIC = Path(__file__).resolve().parents[3] / "labmon" / "static" / "labmon"


@pytest.fixture
def served(collected_static) -> Path:
    """The folder that collectstatic makes."""
    return collected_static / "labmon"


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

    assert max(depth(name) for name in imports) <= 3  # the entry and two below it


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


def test_a_file_that_was_not_collected_does_not_break_a_page():
    assert HashedStorage(location="/nowhere").stored_name("labmon/css/none.css") == "labmon/css/none.css"


def test_templates_name_collected_files_only(collected_static):
    """What `stored_name` forgives at night is found here."""
    templates = STATIC.parents[2] / "templates"
    named = {
        name for page in templates.rglob("*.html") for name in re.findall(r"""{% static ['"]([^'"]+)['"] %}""", page.read_text())
    }
    assert len(named) >= 6
    assert [name for name in named if not (collected_static / name).is_file()] == []
