"""The leakage of a tap's splitter from two exposures, on a page."""

from typing import Any

from django import forms
from django.http import HttpRequest, HttpResponse
from django.views.decorators.http import require_http_methods

from analysis.models import Calibration
from ingest.models import Tap
from labmon.benches.leakages import LeakageTaking, enter_leakage, leakage_taking
from labmon.benches.zeros import Stretch
from labmon.people.models import Person
from labmon.screen.door import for_people
from labmon.screen.exposure_view import ExposureWords, Proposal
from labmon.screen.exposures import ExposureForm, exposures_page
from labmon.screen.forms import Number
from labmon.screen.present import er_text
from labmon.screen.zero_view import leak_text


class LeakageForm(ExposureForm):
    """Two stretches of the past, and what the light used is worth."""

    straight = forms.DateTimeField(label="Light meant for port 1 from (UTC)", help_text="e.g. 2031-03-04 02:00:10",
                                   required=False)
    exchanged = forms.DateTimeField(label="Light meant for port 2 from (UTC)", help_text="e.g. 2031-03-04 02:01:30",
                                    required=False)
    light_er_db = Number(label="Least extinction ratio of that light, dB", min_value=1, max_value=100,
                         help_text="Of the polarizer in front, as it stands in the beam. Without a bound the light's own "
                                   "leak would be taken off as the splitter's, and the bench would look better than it is.")

    def options(self) -> dict[str, Any]:
        return {"light_er_db": self.cleaned_data["light_er_db"]}


class LeakageOfSplitter:
    """The leakage as a quantity of two exposures."""

    name = "leakage"
    form = LeakageForm
    words = ExposureWords(
        title="Leakage",
        begin="How much light goes the wrong way in the splitter of {name}? Two exposures of clean light tell.",
        how="Put a polarizer in front of the splitter and turn it until port 2 reads least; let it stand. Then turn it by 90°, "
            "until port 1 reads least, and let it stand again. Take the zero and the gain first: each mistake in them becomes "
            "leakage. The power may change between the two.",
        first="Light meant for port 1",
        second="Light meant for port 2",
        first_act="Port 2 reads least and the light stands: watch it now",
        second_act="Port 1 reads least and the light stands: watch it now",
    )

    def proposal(self, name: str, tap: Tap, first: Stretch, second: Stretch, **options: Any) -> Proposal:
        taking = leakage_taking(tap, first, second, **options)
        return Proposal(leakage_sentence(name, taking), leakage_notes(taking, options["light_er_db"]))

    def enter(self, tap: Tap, first: Stretch, second: Stretch, *, by: Person, **options: Any) -> Calibration:
        return enter_leakage(tap, first, second, by=by, **options)

    def entered(self, name: str, version: Calibration) -> str:
        return f"The leakage of {name} is taken off from the earlier stretch on, with its uncertainty."


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def leakage_page(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """Watch two exposures or name them, look at the proposal, enter it."""
    return exposures_page(request, station, tap, LeakageOfSplitter())


def leakage_sentence(name: str, taking: LeakageTaking) -> str:
    """One sentence: both shares with their errors."""
    (_, b), (c, _) = taking.leakage.matrix
    (_, b_sigma), (c_sigma, _) = taking.leakage.sigma
    return (f"In the splitter of {name}, {leak_text(c, c_sigma)} of the light meant for port 1 lands in port 2, and "
            f"{leak_text(b, b_sigma)} of that meant for port 2 in port 1.")


def leakage_notes(taking: LeakageTaking, light_er_db: float) -> list[str]:
    """What that does to the extinction ratio, how it was told from the light's own leak, and what held before."""
    off = ("its uncertainty limits nothing" if taking.ceiling_off_db == float("inf")
           else f"its uncertainty still limits it to {er_text(taking.ceiling_off_db)}")
    notes = [f"Left in, it hides every extinction ratio above {er_text(taking.ceiling_left_db)}; taken off, {off}.",
             f"Light of {light_er_db:g} dB may itself have brought part of what was seen; how much is not known and stands in "
             "the uncertainty."]
    before = taking.before.leakage if taking.before else None
    notes.append("No leakage is taken off so far." if before is None else
                 f"So far {100 * before[1][0]:.3g} % and {100 * before[0][1]:.3g} % are taken off.")
    return notes

