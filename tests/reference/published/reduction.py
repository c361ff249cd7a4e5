"""Reduction: extinction ratio, Stokes, scans, costs.

Values that come from outside: papers, rules of the trade and other libraries. Derived reference values (reduction.json)
are compared in tests/analysis/ and are not repeated here, but for some that the trade quotes. Figures of other libraries
were computed with the version named; the tests there call the libraries again.
"""

from functools import cache

import numpy as np
from scipy.optimize import minimize

from analysis.fibre.coherency import jones_of_stokes
from analysis.fibre.cost import limit_from_qber
from analysis.fibre.jones import jones_retarder
from analysis.fibre.mueller import mueller_of_jones, mueller_retarder
from analysis.reduce.axis import misalignment_rad_from_er_db
from analysis.reduce.errors_in_both import deming_line
from analysis.reduce.extinction import DETECTION_SIGMA, upper_limit
from analysis.reduce.polarimeter import calibrate_polarimeter
from analysis.reduce.scan import plate_matrix, stokes_of_plate_scan
from analysis.reduce.stokes import dop_and_sop
from analysis.reduce.two_port import TwoPortMeasurement, er_to_first_order
from tests.reference.published.case import Case, Origin

SABATKE = "D. S. Sabatke et al., Opt. Lett. 25, 802 (2000), abstract"
PEARSON = "K. Pearson, Phil. Mag. 2, 559 (1901); data as printed in scipy's documentation"
PEARSON_X = np.array([0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
PEARSON_Y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
PY_POL = "py_pol 1.3"
LEAKY = TwoPortMeasurement(reading1=0.98005, reading2=0.06995, reading1_sigma=1e-4, reading2_sigma=1e-4,
                           leakage=[[0.98, 0.001], [0.02, 0.999]], leakage_sigma=[[1e-3, 1e-4], [5e-4, 1e-3]])  # fmt: skip


@cache
def best_plate() -> np.ndarray:
    """Retardance and the two angles, degrees, that our condition number finds best for four readings."""

    def condition(x: np.ndarray) -> float:
        try:
            plate = np.radians([-x[2], -x[1], x[1], x[2]])
            return stokes_of_plate_scan(plate, np.ones(4), retardance_rad=np.radians(x[0])).condition
        except ValueError:
            return 100.0

    options = {"xatol": 1e-5, "fatol": 1e-10, "maxiter": 4000}
    return minimize(condition, [125.0, 20.0, 45.0], method="Nelder-Mead", options=options).x


def tetrahedron_condition() -> float:
    """Condition number of four states at the corners of a tetrahedron."""
    corners = np.array([[1, 1, 1, 1], [1, -1, -1, 1], [1, 1, -1, -1], [1, -1, 1, -1]]) / [1, *[np.sqrt(3)] * 3]
    return calibrate_polarimeter(corners, corners @ corners.T).state_condition


def field_phase_deg() -> float:
    """Phase of Ey against Ex of (1, 0.28, 0.48, 0.8314), degrees."""
    ex, ey = jones_of_stokes(np.array([1.0, 0.28, 0.48, 0.8313843876330611]))
    return float(np.degrees(np.angle(ey / ex)))


CASES = [
    Case(name="er-20-db-angle", quantity="Misalignment of 20 dB", published=5.71, unit="deg", tolerance=0.005, formula="F-28",
         source="rule of the trade", origin=Origin.MEMORY, compute=lambda: np.degrees(misalignment_rad_from_er_db(20.0))),
    Case(name="er-30-db-angle", quantity="Misalignment of 30 dB", published=1.81, unit="deg", tolerance=0.005, formula="F-28",
         source="rule of the trade", origin=Origin.MEMORY, compute=lambda: np.degrees(misalignment_rad_from_er_db(30.0))),
    Case(name="currie-threshold", quantity="Threshold of detection, 5 %", published=1.645, unit="sigma", tolerance=5e-4,
         formula="F-06", source="L. A. Currie, Anal. Chem. 40, 586 (1968)", origin=Origin.MEMORY,
         compute=lambda: DETECTION_SIGMA),
    Case(name="bounded-gaussian-minus-1", quantity="95 % upper limit of a net of −1 σ", published=1.4119943957872012,
         unit="sigma", tolerance=1e-6, formula="F-06", source="scipy, truncated normal", origin=Origin.LIBRARY,
         compute=lambda: float(upper_limit(np.array(-1.0), np.array(1.0)))),
    Case(name="er-sigma-leaky", quantity="u(ER) with uncertain leakage", published=0.044984164911124426, unit="dB",
         tolerance=1e-8, formula="F-22", source="uncertainties 3.2", origin=Origin.LIBRARY,
         compute=lambda: float(er_to_first_order(LEAKY).er_sigma_db[0])),
    Case(name="pearson-slope", quantity="Line of closest fit, slope", published=-0.5456, unit="", tolerance=1e-4, formula="F-30",
         source=PEARSON, origin=Origin.MEMORY, compute=lambda: deming_line(PEARSON_X, PEARSON_Y, noise_ratio=1.0).slope),
    Case(name="pearson-intercept", quantity="Line of closest fit, intercept", published=5.784, unit="", tolerance=5e-4,
         formula="F-30", source=PEARSON, origin=Origin.MEMORY,
         compute=lambda: deming_line(PEARSON_X, PEARSON_Y, noise_ratio=1.0).intercept),
    Case(name="deming-odrpack", quantity="Slope for a noise ratio of 4", published=-0.5413676743258637, unit="",
         tolerance=5e-6, formula="F-30", source="odrpack 0.7 (ODRPACK)", origin=Origin.LIBRARY,
         compute=lambda: deming_line(PEARSON_X, PEARSON_Y, noise_ratio=4.0).slope),
    Case(name="sabatke-retardance", quantity="Best retardance for four plate angles", published=132.0, unit="deg",
         tolerance=0.5, formula="F-37", source=SABATKE, origin=Origin.READ, compute=lambda: best_plate()[0]),
    Case(name="sabatke-inner", quantity="Best inner plate angle", published=15.1, unit="deg", tolerance=0.1, formula="F-37",
         source=SABATKE, origin=Origin.READ, compute=lambda: best_plate()[1]),
    Case(name="sabatke-outer", quantity="Best outer plate angle", published=51.7, unit="deg", tolerance=0.1, formula="F-37",
         source=SABATKE, origin=Origin.READ, compute=lambda: best_plate()[2]),
    Case(name="tetrahedron", quantity="Condition number of the best four states", published=np.sqrt(3.0), unit="", tolerance=1e-9,
         formula="F-39", source="J. S. Tyo, Appl. Opt. 41, 619 (2002)", origin=Origin.MEMORY, compute=tetrahedron_condition),
    Case(name="scan-py-pol", quantity="Intensity behind plate and analyser", published=0.5906540815030255, unit="",
         tolerance=1e-9, formula="F-35", source=PY_POL, origin=Origin.LIBRARY,
         compute=lambda: (plate_matrix(np.radians([20.0]), np.radians(100.0)) @ [1.0, 0.6, 0.48, 0.64])[0]),
    Case(name="dop-py-pol", quantity="DOP of (2, −0.6, 0.8, −0.5)", published=0.5590169943749475, unit="", tolerance=1e-9,
         formula="F-11", source=PY_POL, origin=Origin.LIBRARY,
         compute=lambda: dop_and_sop(*(np.array([x]) for x in (2.0, -0.6, 0.8, -0.5)))[0][0]),
    Case(name="mueller-py-pol", quantity="Retarder, Mueller entry (2, 3) from Jones", published=0.6634139481689386, unit="",
         tolerance=1e-9, formula="F-34", source=PY_POL, origin=Origin.LIBRARY,
         compute=lambda: mueller_of_jones(jones_retarder(np.radians(60.0), np.radians(20.0)))[2, 3]),
    Case(name="mueller-handbook", quantity="The same by the handbook's closed form", published=0.6634139481689386, unit="",
         tolerance=1e-9, formula="F-34", source=PY_POL, origin=Origin.LIBRARY,
         compute=lambda: mueller_retarder(np.radians(60.0), np.radians(20.0))[2, 3]),
    Case(name="collett-phase", quantity="Phase of the field behind a Stokes vector", published=60.0, unit="deg", tolerance=1e-9,
         formula="F-33", source="E. Collett, Polarized Light in Fiber Optics (2003)", origin=Origin.MEMORY,
         compute=field_phase_deg),
    Case(name="bb84-er", quantity="ER of an error rate of 11 %", published=9.1, unit="dB", tolerance=0.05, formula="F-41",
         source="11 %: P. W. Shor, J. Preskill, Phys. Rev. Lett. 85, 441 (2000)", origin=Origin.MEMORY,
         compute=lambda: limit_from_qber(0.11).er_db),
]  # fmt: skip
