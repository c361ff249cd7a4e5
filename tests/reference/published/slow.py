"""Trend, temperature, arc, lines, changes.

Values of T06, T07 and T09 in ../slow.json, and of reference libraries run beside.
"""

import math

import numpy as np

from analysis.drift.arc import worst_er_of_circle_db
from analysis.drift.changes.cusum import tabular_cusum
from analysis.drift.changes.ewma import ewma
from analysis.drift.changes.pettitt import pettitt
from analysis.drift.changes.run_length import cusum_run_length, ewma_run_length, two_sided_cusum_run_length
from analysis.drift.changes.segments import segments, single_change
from analysis.drift.effective import correlation_effective_size, mean_effective_size
from analysis.drift.hac import Regression, regress
from analysis.drift.hum import alias_hz
from analysis.drift.lines import false_alarm_chance, power_at, single_chance
from analysis.drift.trend import trend
from tests.reference.published.case import Case, Origin
from tests.reference.values import reference

MONTGOMERY = "D. C. Montgomery, Introduction to Statistical Quality Control, CUSUM ARL table for k = 1/2"
HANDBOOK_ARL = "NIST/SEMATECH e-Handbook, sec. 6.3.2.3.1"
LUCAS = "J. M. Lucas, M. S. Saccucci, Technometrics 32, 1 (1990)"
COBB = "G. W. Cobb, Biometrika 65, 243 (1978), data shipped with statsmodels"
IVREG2 = "ivreg2's output in the test suite of statsmodels"
BALUEV = "R. V. Baluev, MNRAS 385, 1279 (2008), run by astropy"


def _nile() -> np.ndarray:
    from statsmodels.datasets import nile

    return nile.load_pandas().data["volume"].to_numpy()


def _macro() -> Regression:
    from statsmodels.datasets import macrodata

    table = macrodata.load_pandas().data
    growth = 400 * np.diff(np.log(table[["realinv", "realgdp"]].to_numpy()), axis=0)
    design = np.stack([growth[:, 1], table["realint"].to_numpy()[:-1], np.ones(len(growth))], axis=1)
    return regress(np.arange(len(growth)), design, growth[:, 0], lags=4)


def _handbook_cusum() -> float:
    x = reference("T06-cusum-hi")["inputs"]
    return float(tabular_cusum(np.array(x["x"]), x["target"], x["k"]).high[-1])


def _handbook_ewma() -> float:
    x = reference("T06-ewma-01")["inputs"]
    return float(ewma(np.array(x["x"]), x["lambda"], x["z0"])[-1])


def _uneven() -> tuple[np.ndarray, np.ndarray]:
    i = np.arange(60)
    at_s = i + 0.4 * np.sin(1.7 * i)
    return at_s, np.cos(2 * np.pi * 0.11 * at_s) + np.sin(0.7 * i**2)


def _astropy_power() -> float:
    from astropy.timeseries import LombScargle

    return float(LombScargle(*_uneven()).power(0.11, method="cython"))


def _theil_sen() -> float:
    from scipy import stats

    return float(stats.theilslopes(_nile(), np.arange(100))[0])


def _arl(h: float, shift: float, published: float, tolerance: float) -> Case:
    return Case(
        name=f"cusum-arl-h{h:g}-d{shift:g}", unit="readings",
        quantity=f"two-sided CUSUM, k 0.5, h {h:g}: run length at {shift:g} σ",
        published=published, tolerance=tolerance, formula="F-84", source=MONTGOMERY, origin=Origin.MEMORY,
        compute=lambda: two_sided_cusum_run_length(0.5, h, shift),
    )


def _case(name, quantity, published, unit, tolerance, formula, source, origin, compute) -> Case:
    return Case(name=name, quantity=quantity, published=published, unit=unit, tolerance=tolerance, formula=formula, source=source,
                origin=origin, compute=compute)


CASES = [
    _case("cusum-handbook", "upper CUSUM of 20 group means, last value", 19.04, "", 0.0101, "F-83",
          "NIST/SEMATECH e-Handbook, sec. 6.3.2.3", Origin.QUOTED, _handbook_cusum),
    _case("ewma-handbook", "EWMA of 20 readings, λ 0.3, last value", 51.99, "", 0.0051, "F-85",
          "NIST/SEMATECH e-Handbook, sec. 6.3.2.4", Origin.QUOTED, _handbook_ewma),
    *[_arl(*row) for row in [
        (4, 0, 168, 0.5), (4, 0.25, 74.2, 0.05), (4, 0.75, 13.3, 0.05), (4, 1, 8.38, 0.005), (4, 1.5, 4.75, 0.005),
        (4, 3, 2.19, 0.005), (4, 4, 1.71, 0.005), (5, 0, 465, 0.5), (5, 0.25, 139, 0.5), (5, 0.5, 38.0, 0.05), (5, 1, 10.4, 0.05),
        (5, 2.5, 3.11, 0.005), (5, 3, 2.57, 0.005), (5, 4, 2.01, 0.005)]],
    _case("cusum-one-4", "one-sided CUSUM, k 0.5, h 4: run length in control", 336, "readings", 1.0, "F-84", HANDBOOK_ARL,
          Origin.QUOTED, lambda: cusum_run_length(0.5, 4.0)),
    _case("cusum-one-5", "one-sided CUSUM, k 0.5, h 5: run length in control", 930, "readings", 1.0, "F-84", HANDBOOK_ARL,
          Origin.QUOTED, lambda: cusum_run_length(0.5, 5.0)),
    _case("ewma-arl-0", "EWMA, λ 0.1, L 2.814: run length in control", 500, "readings", 0.5, "F-85", LUCAS, Origin.MEMORY,
          lambda: ewma_run_length(0.1, 2.814)),
    _case("ewma-arl-1", "EWMA, λ 0.1, L 2.814: run length at 1 σ", 10.3, "readings", 0.05, "F-85", LUCAS, Origin.MEMORY,
          lambda: ewma_run_length(0.1, 2.814, 1.0)),
    _case("ewma-arl-04", "EWMA, λ 0.4, L 3.054: run length at 1 σ", 14.3, "readings", 0.05, "F-85", LUCAS, Origin.MEMORY,
          lambda: ewma_run_length(0.4, 3.054, 1.0)),
    _case("nile-year", "Nile at Aswan: last year of the old level", 1898, "", 0.0, "F-87", COBB, Origin.MEMORY,
          lambda: 1870.0 + single_change(_nile()).index),
    _case("nile-before", "Nile: mean before", 1097.75, "1e8 m³", 1e-6, "F-87", COBB, Origin.LIBRARY,
          lambda: single_change(_nile()).before),
    _case("nile-after", "Nile: mean after", 849.9722222, "1e8 m³", 1e-6, "F-87", COBB, Origin.LIBRARY,
          lambda: single_change(_nile()).after),
    _case("nile-segments", "Nile: only change by penalised least squares (ruptures Pelt)", 28, "", 0.0, "F-88", COBB,
          Origin.LIBRARY,
          lambda: float(segments(_nile())[0])),
    _case("nile-pettitt", "Nile: Pettitt's K", 1617, "", 0.0, "F-89", "A. N. Pettitt, Appl. Stat. 28, 126 (1979), definition",
          Origin.MEMORY, lambda: pettitt(_nile()).statistic),
    _case("hac-slope", "macro data: slope on growth", 4.374221665, "", 1e-7, "F-71", IVREG2, Origin.QUOTED,
          lambda: float(_macro().coefficient[0])),
    _case("hac-se-1", "macro data: its Newey–West error, 4 lags", 0.3312564488, "", 1e-8, "F-71", IVREG2, Origin.QUOTED,
          lambda: float(_macro().standard_error[0])),
    _case("hac-se-2", "macro data: error of the second slope", 0.2958234759, "", 1e-8, "F-71", IVREG2, Origin.QUOTED,
          lambda: float(_macro().standard_error[1])),
    _case("theil-sen", "Nile: Theil–Sen slope per year (scipy theilslopes)", _theil_sen(), "1e8 m³", 1e-9, "F-72", COBB,
          Origin.LIBRARY, lambda: trend(np.arange(100) * 86_400_000_000, _nile(), 86_400).per_day),
    _case("neff-mean", "readings worth of 100 AR(1) readings, ρ 0.5", 33.783783784, "", 1e-8, "F-70", "closed form",
          Origin.MEMORY, lambda: mean_effective_size(100, 0.5)),
    _case("neff-corr", "pairs worth of 400, ρ 0.8 and 0.6 (simulated)", 141.3, "", 1.5, "F-74",
          "M. S. Bartlett (1935); C. S. Bretherton et al., J. Climate 12, 1990 (1999)", Origin.MEMORY,
          lambda: correlation_effective_size(400, 0.8 ** np.arange(300), 0.6 ** np.arange(300))),
    _case("lomb", "Lomb–Scargle power at 0.11 Hz of 60 uneven readings", _astropy_power(), "", 1e-10, "F-78",
          "astropy LombScargle (fit_mean)", Origin.LIBRARY, lambda: float(power_at(*_uneven(), np.array([0.11]))[0])),
    _case("fap-single", "chance of power 0.2 at one frequency, 60 readings", 0.0017300738, "", 1e-9, "F-79", BALUEV,
          Origin.LIBRARY,
          lambda: float(single_chance(np.array(0.2), 60))),
    _case("fap-baluev", "chance of a peak of 0.4 up to 0.5 Hz", 6.4365211e-05, "", 1e-11, "F-79", BALUEV, Origin.MEMORY,
          lambda: float(false_alarm_chance(np.array(0.4), _uneven()[0], 0.5))),
    _case("hum", "period of 100 Hz ripple of 49.98 Hz mains sampled at 1 Hz", 25.0, "s", 1e-9, "F-81", "sampling theorem",
          Origin.MEMORY,
          lambda: 1.0 / alias_hz(99.96, 1.0)),
    _case("circle-20", "worst ER of a circle of radius 11.421°", 20.0, "dB", 1e-7, "F-77", "law of Malus", Origin.MEMORY,
          lambda: worst_er_of_circle_db(math.radians(11.4211862749), 0.0)),
]
