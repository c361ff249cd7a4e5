"""What a span tells, as tables."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import pandas as pd


@dataclass(frozen=True)
class Statistics:
    """The statistics of one tap and span.

    Attributes:
        figures: Every single figure by its name in the API, such as ``er.leak_mean_db``; None where the tap cannot tell.
        quantiles: Quantiles of the extinction ratio by share, column ``er_db``.
        allan: Allan deviations of each component by averaging time: ``deviation``, ``low``, ``high``, ``edf``, ``noise``;
            index (component, tau_s). Components are dimensionless (Stokes) or in rad (angle), as the API gives them.
        displacement: How far the state has gone after a time, index ``tau_s``.
        facts: The whole answer.
    """

    figures: pd.Series
    quantiles: pd.DataFrame
    allan: pd.DataFrame
    displacement: pd.DataFrame
    facts: dict[str, Any]

    def _repr_html_(self) -> str:
        return self.figures.dropna().to_frame(f"{self.facts['tap']}, {self.facts['span']}").to_html()


def statistics_of(said: dict[str, Any]) -> Statistics:
    """The answer as tables; empty ones where a part is missing."""
    figures = pd.Series(dict(_single(said)), dtype=object, name="value")
    allan, displacement = _allan(said.get("allan")), _displacement(said.get("displacement"))
    return Statistics(figures, _quantiles(said.get("er")), allan, displacement, said)


def _single(said: Mapping[str, Any], before: str = "") -> Any:
    for name, value in said.items():
        if isinstance(value, Mapping):
            yield from _single(value, f"{before}{name}.")
        elif not isinstance(value, list):
            yield f"{before}{name}", value


def _quantiles(er: Mapping[str, Any] | None) -> pd.DataFrame:
    er = er or {"shares": [], "quantiles_db": []}
    return pd.DataFrame({"er_db": pd.Series(er["quantiles_db"], dtype="float64")},
                        ).set_index(pd.Index(er["shares"], dtype="float64", name="share"))


def _allan(allan: Mapping[str, Any] | None) -> pd.DataFrame:
    rows = [(curve["component"], tau_s, deviation, low, high, edf, noise)
            for curve in (allan or {"curves": []})["curves"]
            for tau_s, deviation, low, high, edf, noise in zip(allan["tau_s"], curve["deviation"], curve["low"], curve["high"],
                                                               curve["edf"], curve["noise"], strict=True)]
    frame = pd.DataFrame(rows, columns=["component", "tau_s", "deviation", "low", "high", "edf", "noise"])
    return frame.set_index(["component", "tau_s"])


def _displacement(said: Mapping[str, Any] | None) -> pd.DataFrame:
    columns = ("mean_square_rad2", "net_rad2", "mean_cosine", "pairs")
    said = said or dict.fromkeys(("tau_s", *columns), [])
    return pd.DataFrame({name: pd.Series(said[name], dtype="float64") for name in columns},
                        ).set_index(pd.Index(said["tau_s"], dtype="float64", name="tau_s"))
