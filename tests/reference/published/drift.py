"""Drift, Allan deviations, random walks and mergeable statistics.

Each case calls a public function with the published inputs of `tests/reference/*.json`.
"""

from collections.abc import Callable
from typing import Any

import numpy as np

from analysis.drift import brownian
from analysis.drift.allan_confidence import Noise, deviation_interval, edf
from analysis.drift.allan_curve import modified_allan_deviation, overlapping_allan_deviation, time_deviation
from analysis.drift.diffusion import diffusion_from_angles
from analysis.drift.displacement import CEILING_RAD2, displacement
from analysis.drift.sphere import MeanDirection, direction_sums, fisher_angle_rad, fisher_concentration, mean_direction
from analysis.drift.summary import merged, summary_of
from tests.reference.aligned import aligned
from tests.reference.lcg import lcg_1000, lcg_values
from tests.reference.published.case import Case, Origin
from tests.reference.values import reference

_SP1065 = "W. J. Riley, NIST SP 1065 (2008), sec. 12.4, pp. 107–108, as quoted in allantools' tests"
_FISHER = "R. A. Fisher, Proc. R. Soc. A 217, 295 (1953); example of an open palaeomagnetism library's documentation"
_STRD = "NIST Statistical Reference Datasets, certified value, set "
_CZEGLEDI = "C. B. Czegledi et al., Sci. Rep. 6, 21217 (2016), model; correlation derived"
_PERRIN = "Perrin (1928), Roberts & Ursell (1960); checked by finite volumes and simulation"


def _data(name: str) -> np.ndarray:
    return np.array(reference(name)["inputs"]["y"], float) if "nbs9" in name else lcg_1000()


def _aligned(name: str, m: int) -> float:
    level = _data(name)
    level = level[: len(level) // m * m]
    return aligned(np.arange(len(level)) * 1_000_000, level, m)[0]


def _allan_cases() -> list[Case]:
    kinds: dict[str, tuple[str, str, Callable[[str, int], float]]] = {
        "adev": ("Allan deviation, aligned means", "F-19", _aligned),
        "oadev": ("Allan deviation, overlapping", "F-50",
                  lambda name, m: overlapping_allan_deviation(_data(name), 1.0, np.array([m])).deviation[0]),
        "tdev": ("time deviation", "F-52", lambda name, m: time_deviation(_data(name), 1.0, np.array([m])).deviation[0]),
    }
    cases = []
    for kind, (words, formula, compute) in kinds.items():
        for data in ("nbs9", "lcg1000"):
            row = reference(f"T04-{data}-{kind}")
            for m, published in zip(row["inputs"]["m"], row["expected"], strict=True):
                cases.append(_case(f"{row['id']}-{m}", f"{words}, {len(_data(row['id']))}-point set, m = {m}", published, "",
                                   row["tolerance"]["value"] * published, formula, _SP1065, Origin.QUOTED,
                                   lambda compute=compute, name=row["id"], m=m: compute(name, m)))
    return cases


def _allantools_cases() -> list[Case]:
    def ratio(ours: Callable[..., Any], theirs: str) -> float:
        """Largest ratio of ours to theirs, or its inverse, over octaves of a random walk of 4096 points."""
        import allantools

        level = np.cumsum(np.random.default_rng(1).standard_normal(4096))
        taus = 2.0 ** np.arange(10)
        expected = getattr(allantools, theirs)(level, rate=1.0, data_type="freq", taus=taus)[1]
        found = ours(level, 1.0, taus.astype(np.int64)).deviation / expected
        return float(np.max(np.maximum(found, 1.0 / found)))

    pairs = ((overlapping_allan_deviation, "oadev", "F-50"), (modified_allan_deviation, "mdev", "F-51"),
             (time_deviation, "tdev", "F-52"))
    return [_case(f"allantools-{theirs}", f"{theirs} of a random walk, 4096 points, m = 1 … 512: worst ratio to the library's",
                  1.0, "", 1e-9, formula, "allantools 2024.6", Origin.LIBRARY,
                  lambda ours=ours, theirs=theirs: ratio(ours, theirs)) for ours, theirs, formula in pairs]


def _confidence_cases() -> list[Case]:
    simple = reference("T04-edfs-white-1000-10")
    interval = reference("T04-ci-01")
    x = interval["inputs"]
    cases = [_case(simple["id"], "degrees of freedom, white noise, 1000 readings, m = 10 (published: simple approximation)",
                   simple["expected"], "", 0.02 * simple["expected"], "F-53", "NIST SP 1065 (2008), simple form, by allantools",
                   Origin.QUOTED, lambda: edf(Noise.WHITE, 981, 10))]
    for place, word in enumerate(("lower", "upper")):
        cases.append(_case(f"T04-ci-01-{word}", f"{word} 95 % bound of an Allan deviation of {x['adev']}",
                           interval["expected"][place], "", 1e-6, "F-54", "allantools 2024.6, scipy 1.17", Origin.LIBRARY,
                           lambda place=place: deviation_interval(x["adev"], x["edf"], x["confidence"])[place]))
    return cases


def _fisher_cases() -> list[Case]:
    parts: dict[str, tuple[str, str, Callable[[MeanDirection], float]]] = {
        "R": ("resultant", "", lambda found: found.resultant),
        "k": ("concentration k", "", lambda found: found.concentration),
        "a95": ("cone of 95 %", "°", lambda found: np.degrees(found.cone_rad)),
    }
    cases = []
    for letter in "ABC":
        row = reference(f"T04-fisher-{letter}")
        for key, (words, unit, part) in parts.items():
            cases.append(_case(f"{row['id']}-{key}", f"{words}, example {letter}", row["expected"][key], unit,
                               1e-8 * row["expected"][key], "F-45, F-46, F-47", _FISHER, Origin.READ,
                               lambda row=row, part=part: part(_directions(row["inputs"]["lon_lat_deg"]))))
    ml = reference("T04-kappa-ml-C")
    cases.append(_case(ml["id"], "most likely concentration, example C", ml["expected"], "", 1e-6, "F-46",
                       "scipy.stats.vonmises_fisher.fit", Origin.LIBRARY,
                       lambda: fisher_concentration(ml["inputs"]["R"] / ml["inputs"]["n"])))
    row = reference("T04-fishq-10")
    cases.append(_case(row["id"], "angle that holds 95 %, concentration 10", row["expected"][2], "°", 1e-6, "F-46",
                       "numerical integration with scipy", Origin.LIBRARY, lambda: np.degrees(fisher_angle_rad(10.0, 0.95))))
    return cases


def _directions(pairs_deg: list[list[float]]) -> MeanDirection:
    longitude, latitude = np.radians(np.array(pairs_deg, float)).T
    sop = np.stack([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)], axis=1)
    return mean_direction(direction_sums(sop))


def _astropy_separation() -> float:
    from astropy.coordinates import angular_separation

    angles = np.array([[0.3, 0.2], [0.3 + 1e-6, 0.2 - 2e-6]])
    sop = np.stack([np.cos(angles[:, 1]) * np.cos(angles[:, 0]), np.cos(angles[:, 1]) * np.sin(angles[:, 0]),
                    np.sin(angles[:, 1])], axis=1)
    ours = np.sqrt(displacement(sop, 1.0, np.array([1])).mean_square_rad2[0])
    return float(ours / angular_separation(*angles[0], *angles[1]))


def _walk_cases() -> list[Case]:
    cases = [_case("astropy-separation", "angle of a step of 2.2 µrad, ratio to the library's", 1.0, "", 1e-8, "F-57",
                   "astropy 8.0, angular_separation", Origin.LIBRARY, _astropy_separation)]
    for lag in (10, 100):
        row = reference(f"T05-acf-lag-{lag}")
        x = row["inputs"]
        cases.append(_case(row["id"], f"Stokes autocorrelation, linewidth 1 µHz, {lag} steps of 60 s", row["expected"], "", 1e-6,
                           "F-60", _CZEGLEDI, Origin.MEMORY, lambda x=x: brownian.stokes_step_correlation(
                               2 * np.pi * x["dp_Hz"] * x["T_s"]) ** x["lag"]))
    for t in (1, 10, 50, 100):
        row = reference(f"T05-bm-{t}")
        x = row["inputs"]["D"], row["inputs"]["t"]
        cases.append(_case(f"{row['id']}-square", f"mean squared angle, D = 0.01 rad²/s, t = {t} s", row["expected"]["E_angle2"],
                           "rad²", 1e-6, "F-59", _PERRIN, Origin.MEMORY, lambda x=x: brownian.mean_square_angle_rad2(*x)))
        cases.append(_case(f"{row['id']}-cosine", f"mean cosine, D = 0.01 rad²/s, t = {t} s", row["expected"]["E_cos"], "", 1e-6,
                           "F-59", _PERRIN, Origin.MEMORY, lambda x=x: brownian.mean_cosine(*x)))
    msad, steps = reference("T04-msad-small"), reference("T05-D-est")
    cases.append(_case("T04-msad-small-2", "mean squared displacement of five states, lag 2", msad["expected"][1], "rad²", 1e-9,
                       "F-57", "definition, by arc cosine", Origin.LIBRARY,
                       lambda: displacement(np.array(msad["inputs"]["s"], float), 1.0, np.array([2])).mean_square_rad2[0]))
    cases.append(_case(steps["id"], "D of four steps", steps["expected"], "rad²/s", 1e-15, "F-61", "by hand", Origin.MEMORY,
                       lambda: diffusion_from_angles(np.array(steps["inputs"]["steps_rad"]), 1.0).diffusion))
    cases.append(_case("T04-uniform-sphere", "mean squared angle of unrelated states", 2.9348022005, "rad²", 1e-9, "F-57",
                       "quadrature", Origin.LIBRARY, lambda: CEILING_RAD2))
    return cases


def _merge_cases() -> list[Case]:
    cases = []
    for data in ("Michelso", "Mavro", "Lew", "NumAcc1"):
        row = reference(f"T11-strd-{data}")
        values = np.array(row["inputs"]["data"], float)
        for key, words in (("mean", "mean"), ("sd", "standard deviation")):
            cases.append(_case(f"{row['id']}-{key}", f"{words} of {data}, merged from parts of 17", row["expected"][key], "",
                               1e-11 * max(1.0, abs(row["expected"]["mean"])), "F-17, F-66", _STRD + data, Origin.READ,
                               lambda values=values, key=key: getattr(
                                   merged(*(summary_of(values[k : k + 17]) for k in range(0, len(values), 17))), key)))
    row = reference("T11-dd-merge")
    for share, published in zip((0.01, 0.5, 0.99), row["expected"], strict=True):
        cases.append(_case(f"T11-dd-merge-{share}", f"quantile {share:g} of 20 000 values, sketch of 1 % merged from two parts",
                           published, "", 0.01 * published, "F-67", "sorted values (exact quantile)", Origin.LIBRARY,
                           lambda share=share: _merged_quantile(share)))
    return cases


def _merged_quantile(share: float) -> float:
    data = np.exp(3.0 * (lcg_values(20001)[1:] - 0.5))
    return float(merged(summary_of(data[:9000]), summary_of(data[9000:])).quantiles(np.array(share)))


def _case(name: str, quantity: str, published: float, unit: str, tolerance: float, formula: str, source: str, origin: Origin,
          compute: Callable[[], Any]) -> Case:
    return Case(name=name, quantity=quantity, published=published, unit=unit, tolerance=tolerance, formula=formula,
                source=source, origin=origin, compute=lambda: float(compute()))


CASES: list[Case] = [*_allan_cases(), *_allantools_cases(), *_confidence_cases(), *_fisher_cases(), *_walk_cases(),
                     *_merge_cases()]
