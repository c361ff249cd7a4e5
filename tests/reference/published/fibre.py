"""Fibre: bends, PM cords, chains of retarders.

Values of the trade and of other libraries; derived ones are compared in tests/analysis/fibre/.
"""

import numpy as np
from scipy.integrate import solve_ivp
from scipy.spatial.transform import Rotation

from analysis.fibre.bend import bend_coefficient, bend_retardance_rad
from analysis.fibre.chain import retarder_chain, rotation_of_mueller
from analysis.fibre.pm_fibre import beat_length_m, er_of_coupling_db, er_range_db, phase_slope_rad_per_k
from analysis.fibre.way_back import smallest_rotation
from tests.reference.published.case import Case, Origin

ULRICH = "R. Ulrich, S. C. Rashleigh, W. Eickhoff, Opt. Lett. 5, 273 (1980)"
SLOPE = "Opt. Lett. 36, 2173 (2011), abstract: dB/dT between -5.3e-7 and -5.9e-7 per K"


def py_pol_entry() -> float:
    """Entry (S3, S1) of two retarders met one after the other, by py_pol."""
    from py_pol.mueller import Mueller

    product = np.eye(4)
    for delta, theta in ((0.7, 0.2), (1.9, -0.5)):
        element = Mueller()
        element.retarder_linear(R=delta, azimuth=theta)
        product = element.M[:, :, 0] @ product
    return float(product[3, 1])


def coupled_er_db() -> float:
    """ER after 700 m at h = 4e-4/m by scipy's solver of the coupled-power equations."""
    end = solve_ivp(lambda _, p: [-4e-4 * (p[0] - p[1]), 4e-4 * (p[0] - p[1])], (0, 700), [1.0, 0.0], rtol=1e-11, atol=1e-14)
    return float(10 * np.log10(end.y[0, -1] / end.y[1, -1]))


CASES = [
    Case(
        name="bend-coefficient",
        quantity="bend coefficient a of silica (n 1.45, p11 0.121, p12 0.270, ν 0.17)",
        published=0.133,
        unit="",
        tolerance=0.003,
        formula="F-110",
        source=ULRICH,
        origin=Origin.MEMORY,
        compute=lambda: bend_coefficient(1.45, 0.121, 0.270, 0.17),
    ),
    Case(
        name="bend-10mm-1550",
        quantity="one turn of 10 mm radius at 1550 nm",
        published=75.8,
        unit="°",
        tolerance=0.05,
        formula="F-110",
        source=f"computed from a = 0.133 of {ULRICH}",
        origin=Origin.MEMORY,
        compute=lambda: float(np.degrees(bend_retardance_rad(0.010, 1.0, 1.55e-6))),
    ),
    Case(
        name="beat-length-1550",
        quantity="beat length at B = 3.5e-4, 1550 nm",
        published=4.43,
        unit="mm",
        tolerance=0.005,
        formula="F-111",
        source="definition",
        origin=Origin.MEMORY,
        compute=lambda: 1e3 * beat_length_m(3.5e-4, 1.55e-6),
    ),
    Case(
        name="thermal-phase-low",
        quantity="thermal phase per metre at 1550 nm, dB/dT = -5.3e-7/K",
        published=2.15,
        unit="rad/(K m)",
        tolerance=0.005,
        formula="F-111",
        source=SLOPE,
        origin=Origin.QUOTED,
        compute=lambda: abs(phase_slope_rad_per_k(1.0, 1.55e-6, -5.3e-7)),
    ),
    Case(
        name="two-joints-worst",
        quantity="two ends of 1.5°: worst ER",
        published=25.6,
        unit="dB",
        tolerance=0.05,
        formula="F-111",
        source="common practice: misalignments add, -20 log10 tan 3°",
        origin=Origin.MEMORY,
        compute=lambda: float(er_range_db(np.radians(1.5), np.radians(1.5)).worst_db),
    ),
    Case(
        name="coupling-ode",
        quantity="ER after 700 m at h = 4e-4/m",
        published=coupled_er_db(),
        unit="dB",
        tolerance=1e-7,
        formula="F-112",
        source="scipy.integrate.solve_ivp",
        origin=Origin.LIBRARY,
        compute=lambda: float(er_of_coupling_db(4e-4, 700.0)),
    ),
    Case(
        name="chain-py-pol",
        quantity="entry (S3, S1) of two retarders in a row",
        published=py_pol_entry(),
        unit="",
        tolerance=1e-9,
        formula="F-113",
        source="py_pol 1.3",
        origin=Origin.LIBRARY,
        compute=lambda: float(retarder_chain([0.7, 1.9], [0.2, -0.5])[3, 1]),
    ),
    Case(
        name="chain-angle",
        quantity="angle of their rotation",
        published=float(Rotation.from_matrix(retarder_chain([0.7, 1.9], [0.2, -0.5])[1:, 1:]).magnitude()),
        unit="rad",
        tolerance=1e-9,
        formula="F-113",
        source="scipy.spatial.transform.Rotation",
        origin=Origin.LIBRARY,
        compute=lambda: float(rotation_of_mueller(retarder_chain([0.7, 1.9], [0.2, -0.5])).angle_rad),
    ),
    Case(
        name="way-back-align",
        quantity="smallest rotation between (1, 2, 2) and (2, -1, 2): angle",
        published=float(Rotation.align_vectors([[2.0, -1.0, 2.0]], [[1.0, 2.0, 2.0]])[0].magnitude()),
        unit="rad",
        tolerance=1e-9,
        formula="F-114",
        source="scipy.spatial.transform.Rotation.align_vectors",
        origin=Origin.LIBRARY,
        compute=lambda: float(smallest_rotation([1.0, 2.0, 2.0], [2.0, -1.0, 2.0]).angle_rad),
    ),
]
