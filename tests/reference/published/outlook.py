"""Outlook: exact bounds, first passage, scores.

Values that come from other libraries, from tables of textbooks, or from rules of the trade. Derived values (outlook.json) are
compared in tests/analysis/outlook/.
"""

import numpy as np
from scipy import stats
from scipy.special import zeta

from analysis.outlook.binomial import failure_bound, proportion_interval, windows_needed
from analysis.outlook.brier import brier_parts
from analysis.outlook.crps import crps_ensemble, crps_gaussian
from analysis.outlook.drift_model import CRITICAL_RATIO
from analysis.outlook.drifted_walk import DISCRETE_SHIFT, passage_moments, passage_probability, passage_quantile_s
from analysis.outlook.mean_reverting import mean_passage_s, reverting_passage
from analysis.outlook.survival import time_quantile_s
from tests.reference.published.case import Case, Origin

SCIPY = "scipy.stats"
FREIREICH_WEEKS = np.array([6, 6, 6, 7, 10, 13, 16, 22, 23, 6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35], float)
FREIREICH = (
    "E. J. Freireich et al., Blood 21, 699 (1963): remission, 21 cases of 6-MP, as tabulated in textbooks of survival analysis"
)
FORECAST = [0.1, 0.1, 0.1, 0.1, 0.3, 0.3, 0.3, 0.7, 0.7, 0.9]
OUTCOME = [0, 0, 1, 0, 0, 1, 0, 1, 1, 1]


def remission_quantile(share: float) -> float:
    """Weeks by which a share of the 6-MP group had relapsed; 9 of 21 did, the rest are censored."""
    reached = np.where(np.arange(21) < 9, FREIREICH_WEEKS, np.nan)
    return time_quantile_s(reached, FREIREICH_WEEKS, share)


CASES = [
    Case(
        name="rule-of-three",
        quantity="none of 100 failed: bound × 100 (rule of three: about 3)",
        published=3.0,
        unit="",
        tolerance=0.05,
        formula="F-90",
        source="J. A. Hanley, A. Lippman-Hand, J. Am. Med. Assoc. 249, 1743 (1983)",
        origin=Origin.MEMORY,
        compute=lambda: 100 * float(failure_bound(0, 100)),
    ),
    Case(
        name="59-samples",
        quantity="good samples for 95 % confidence of at most 5 % failures",
        published=59.0,
        unit="samples",
        tolerance=0.0,
        formula="F-90",
        source="S. S. Wilks, Ann. Math. Stat. 12, 91 (1941): the 95/95 rule",
        origin=Origin.MEMORY,
        compute=lambda: float(windows_needed(0, bound=0.05)),
    ),
    Case(
        name="exact-1-of-22",
        quantity="1 of 22 failed: upper bound at 95 %",
        published=float(stats.binomtest(1, 22, alternative="less").proportion_ci(0.95, "exact").high),
        unit="",
        tolerance=1e-9,
        formula="F-90",
        source=f"{SCIPY}.binomtest",
        origin=Origin.LIBRARY,
        compute=lambda: float(failure_bound(1, 22)),
    ),
    Case(
        name="exact-9-of-12",
        quantity="9 of 12: lower end of the 95 % interval",
        published=float(stats.binomtest(9, 12).proportion_ci(0.95, "exact").low),
        unit="",
        tolerance=1e-9,
        formula="F-90",
        source=f"{SCIPY}.binomtest",
        origin=Origin.LIBRARY,
        compute=lambda: float(proportion_interval(9, 12)[0]),
    ),
    Case(
        name="remission-median",
        quantity="remission under 6-MP: median",
        published=23.0,
        unit="weeks",
        tolerance=0.0,
        formula="F-94",
        source=FREIREICH,
        origin=Origin.MEMORY,
        compute=lambda: remission_quantile(0.5),
    ),
    Case(
        name="remission-quarter",
        quantity="remission under 6-MP: lower quartile",
        published=13.0,
        unit="weeks",
        tolerance=0.0,
        formula="F-94",
        source=FREIREICH,
        origin=Origin.MEMORY,
        compute=lambda: remission_quantile(0.25),
    ),
    Case(
        name="passage-cdf",
        quantity="walk (a 5, v 0.1, s 0.8) arrived by 100 s",
        published=float(stats.invgauss.cdf(100.0, 50 / 39.0625, scale=39.0625)),
        unit="",
        tolerance=1e-12,
        formula="F-95",
        source=f"{SCIPY}.invgauss",
        origin=Origin.LIBRARY,
        compute=lambda: float(passage_probability(5.0, 0.1, 0.8, 100.0)),
    ),
    Case(
        name="passage-median",
        quantity="the same: median time",
        published=float(stats.invgauss.ppf(0.5, 50 / 39.0625, scale=39.0625)),
        unit="s",
        tolerance=1e-8,
        formula="F-96",
        source=f"{SCIPY}.invgauss",
        origin=Origin.LIBRARY,
        compute=lambda: float(passage_quantile_s(5.0, 0.1, 0.8, 0.5)),
    ),
    Case(
        name="passage-variance",
        quantity="the same: variance",
        published=float(stats.invgauss.var(50 / 39.0625, scale=39.0625)),
        unit="s²",
        tolerance=1e-8,
        formula="F-96",
        source=f"{SCIPY}.invgauss",
        origin=Origin.LIBRARY,
        compute=lambda: float(passage_moments(5.0, 0.1, 0.8).variance_s2),
    ),
    Case(
        name="passage-driftless",
        quantity="driftless walk (a 5, s 0.8) arrived by 100 s",
        published=float(stats.levy.cdf(100.0, scale=39.0625)),
        unit="",
        tolerance=1e-12,
        formula="F-95",
        source=f"{SCIPY}.levy",
        origin=Origin.LIBRARY,
        compute=lambda: float(passage_probability(5.0, 0.0, 0.8, 100.0)),
    ),
    Case(
        name="discrete-shift",
        quantity="shift of a barrier seen only in steps, -ζ(½)/√(2π)",
        published=-float(zeta(0.5)) / np.sqrt(2 * np.pi),
        unit="s√Δt",
        tolerance=1e-12,
        formula="F-97",
        source="scipy.special.zeta; 0.5826 in Broadie, Glasserman, Kou (1997)",
        origin=Origin.LIBRARY,
        compute=lambda: DISCRETE_SHIFT,
    ),
    Case(
        name="siegert-1sd",
        quantity="mean-reverting, mean time from the mean to 1 sd",
        published=2.0934066497,
        unit="1/θ",
        tolerance=1e-8,
        formula="F-98",
        source="A. J. F. Siegert, Phys. Rev. 81, 617 (1951), by mpmath",
        origin=Origin.MEMORY,
        compute=lambda: float(mean_passage_s(0.0, 1.0, 0.0, 1.0, 1.0)),
    ),
    Case(
        name="siegert-3sd-modes",
        quantity="to 3 sd, by the sum over modes",
        published=86.931619899,
        unit="1/θ",
        tolerance=1e-5,
        formula="F-99",
        source="as above",
        origin=Origin.MEMORY,
        compute=lambda: reverting_passage(0.0, 3.0, 0.0, 1.0, 1.0).mean_s,
    ),
    Case(
        name="dickey-fuller-5",
        quantity="critical likelihood ratio at 5 %, τ_μ² of -2.86",
        published=2.86**2,
        unit="",
        tolerance=0.05,
        formula="F-102",
        source="D. A. Dickey, W. A. Fuller, J. Am. Stat. Assoc. 74, 427 (1979)",
        origin=Origin.MEMORY,
        compute=lambda: CRITICAL_RATIO[0.05],
    ),
    Case(
        name="brier-resolution",
        quantity="resolution of ten forecasts",
        published=13 / 120,
        unit="",
        tolerance=1e-12,
        formula="F-104",
        source="A. H. Murphy, J. Appl. Meteorol. 12, 595 (1973); in exact fractions",
        origin=Origin.MEMORY,
        compute=lambda: brier_parts(FORECAST, OUTCOME).resolution,
    ),
    Case(
        name="crps-standard",
        quantity="CRPS of N(0, 1) at 0, (√2 - 1)/√π",
        published=(np.sqrt(2) - 1) / np.sqrt(np.pi),
        unit="",
        tolerance=1e-12,
        formula="F-107",
        source="T. Gneiting et al., Mon. Weather Rev. 133, 1098 (2005)",
        origin=Origin.MEMORY,
        compute=lambda: float(crps_gaussian(0.0, 1.0, 0.0)),
    ),
    Case(
        name="crps-energy",
        quantity="CRPS of members 1, 2, 5 at 3: half the squared energy distance",
        published=0.5 * float(stats.energy_distance([1.0, 2.0, 5.0], [3.0])) ** 2,
        unit="",
        tolerance=1e-12,
        formula="F-108",
        source=f"{SCIPY}.energy_distance",
        origin=Origin.LIBRARY,
        compute=lambda: float(crps_ensemble([1.0, 2.0, 5.0], 3.0)),
    ),
]
