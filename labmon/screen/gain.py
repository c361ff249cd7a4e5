"""The gain of two ports by exchange of the polarizations, on a page."""

from typing import Any

from django import forms
from django.http import HttpRequest, HttpResponse
from django.views.decorators.http import require_http_methods

from analysis.models import Calibration
from ingest.models import Tap
from labmon.benches.gains import GainTaking, enter_gain, gain_taking
from labmon.benches.zeros import Stretch
from labmon.people.models import Person
from labmon.screen.door import for_people
from labmon.screen.exposure_view import ExposureWords, Proposal
from labmon.screen.exposures import ExposureForm, exposures_page
from labmon.screen.present import er_text, number_text


class GainForm(ExposureForm):
    """Two stretches of the past."""

    straight = forms.DateTimeField(label="Light in its wanted port from (UTC)", help_text="e.g. 2031-03-04 02:00:10",
                                   required=False)
    exchanged = forms.DateTimeField(label="Light turned by 90° from (UTC)", help_text="e.g. 2031-03-04 02:01:30", required=False)


class Gain:
    """The gain ratio as a quantity of two exposures."""

    name = "gain"
    form = GainForm
    words = ExposureWords(
        title="Gain",
        begin="How much more does port 1 of {name} read than port 2? One exchange of the light tells.",
        how="Let the light stand in its wanted port for a while, turn it by 90° (a half-wave plate by 45°), and let it stand "
            "again. Take the zero first. The power may change between the two, the state may not but for the turn. Unequal "
            "leakages of the splitter show as a gain: enter the leakage too.",
        first="Light in its wanted port",
        second="Light turned by 90°",
        first_act="The light stands in its wanted port: watch it now",
        second_act="The light is turned by 90° and stands: watch it now",
    )

    def proposal(self, name: str, tap: Tap, first: Stretch, second: Stretch, **options: Any) -> Proposal:
        return Proposal(gain_words(name, gain_taking(tap, first, second)), [])

    def enter(self, tap: Tap, first: Stretch, second: Stretch, *, by: Person, **options: Any) -> Calibration:
        return enter_gain(tap, first, second, by=by)

    def entered(self, name: str, version: Calibration) -> str:
        return f"The gain of {name} is {version.gain_ratio:.5g} from the earlier stretch on."


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def gain_page(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """Watch two stretches or name them, look at the proposal, enter it."""
    return exposures_page(request, station, tap, Gain())


def gain_words(name: str, taking: GainTaking) -> str:
    """One sentence: the gain, its error, what it was, and the ER that is free of it."""
    return (f"Port 1 of {name} reads {taking.gain_ratio:.5g} ± {taking.sigma:.1g} times what port 2 does "
            f"(so far {taking.before:.5g}); the extinction ratio, free of any gain, "
            f"is {er_text(taking.er_db)} ± {number_text(taking.er_sigma_db, 2)}.")
