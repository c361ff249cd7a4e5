"""The ten benches of the Skerry Fibre Laboratory (invented, as are all names)."""

from dataclasses import dataclass

import numpy as np

from analysis.fibre.pm_fibre import PmLink
from labmon.demo.paths import PlainFibre, PmCord


@dataclass(frozen=True, slots=True, kw_only=True)
class Ports:
    """Splitter, detectors and unit of a two-port tap. Zeros, noises, top and step in the raw unit."""

    unit: str
    units_per_w: float
    zero1: float
    zero2: float
    noise1: float
    noise2: float
    top: float
    gain_ratio: float = 1.0
    step: float = 0.0
    leakage: tuple[tuple[float, float], tuple[float, float]] = ((1.0, 0.0), (0.0, 1.0))
    has_spread: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Polarimeter:
    """A Stokes tap: degree of polarization, noise of each component relative to S0, unit, wanted ellipse."""

    unit: str
    units_per_w: float
    dop: float
    noise: float
    azimuth_rad: float
    ellipticity_rad: float
    jitter_s: float = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitPlan:
    """The experiment's limit: ``er_db`` below or ``angle_deg`` above is an alarm; deadband in the quantity's unit."""

    quantity: str
    alarm: float
    warning: float
    deadband: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BenchPlan:
    """One bench: where it stands, what it is for, who owns it, and how its light and its sender behave."""

    name: str
    room: str
    experiment: str
    owner: str
    experiment_owner: str
    tap: str
    laser: str
    power_w: float
    path: PmCord | PlainFibre
    head: Ports | Polarimeter
    limit: LimitPlan
    firmware: str
    flicker: float = 0.005
    buffer_s: float = np.inf
    """How much unsent history the station can hold, s."""

    @property
    def station(self) -> str:
        """Short name of its station."""
        return self.name.lower()


def _pm(worst_db: float, best_db: float, **more: float) -> PmCord:
    """A PM cord whose leak swings between two ERs: the ends' misalignments are half sum and half difference."""
    total, difference = (np.arcsin(10.0 ** (-er_db / 20.0)) for er_db in (worst_db, best_db))
    return PmCord(link=PmLink(launch_rad=(total + difference) / 2, exit_rad=(total - difference) / 2), **more)


MANAGER, RESEARCHER, STUDENT, TECHNICIAN, GUEST = "maren", "tobias", "asha", "joren", "nadia"

BENCHES = (
    BenchPlan(name="N1", room="North Hall", experiment="Two-arm strain interferometer", owner=MANAGER,
              experiment_owner=RESEARCHER, tap="arm-end", laser="Beacon", power_w=0.8e-3,
              path=PlainFibre(deg_per_k=8.0, lag_s=60.0, walk_deg_per_root_day=6.0, relaxes_days=2.0, offset_deg=3.0),
              head=Polarimeter(unit="mW", units_per_w=1e3, dop=0.986, noise=0.002, azimuth_rad=np.radians(22.0),
                               ellipticity_rad=np.radians(6.0)),
              limit=LimitPlan(quantity="angle_deg", alarm=36.0, warning=25.0), firmware="polarimeter pc 1.8"),
    BenchPlan(name="N2", room="North Hall", experiment="EOM input", owner=STUDENT, experiment_owner=STUDENT, tap="eom-in",
              laser="Beacon", power_w=1.0e-3,
              path=PmCord(link=PmLink(launch_rad=np.radians(1.5), exit_rad=np.radians(1.5)), length_m=3.0,
                          wavelength_m=1550e-9, phase0_rad=np.pi / 2, lag_s=25.0, floor_leak=9e-5),
              head=Ports(unit="uW", units_per_w=1e6, zero1=0.8, zero2=0.30, noise1=0.05, noise2=0.004, top=3000.0,
                         has_spread=True),
              limit=LimitPlan(quantity="er_db", alarm=20.0, warning=23.0), firmware="bench board 1.4", buffer_s=3 * 3600.0),
    BenchPlan(name="N3", room="North Hall", experiment="Polarization key distribution over 25 km", owner=MANAGER,
              experiment_owner=RESEARCHER, tap="reference", laser="Beacon", power_w=0.2e-3,
              path=PlainFibre(deg_per_k=2.5, lag_s=300.0, nightly_deg_per_root_hour=2.3, offset_deg=1.0, floor_leak=2e-4),
              head=Ports(unit="W", units_per_w=1.0, zero1=2e-7, zero2=3e-8, noise1=1e-8, noise2=2e-9, top=1e-3),
              limit=LimitPlan(quantity="er_db", alarm=17.0, warning=20.0), firmware="bench pc 1.2"),
    BenchPlan(name="S1", room="South Hall", experiment="Cold-atom trap light", owner=MANAGER, experiment_owner=RESEARCHER,
              tap="trap-light", laser="S1 laser", power_w=2.0e-3,
              path=_pm(25.6, 28.4, length_m=5.0, wavelength_m=780e-9, phase0_rad=0.4, lag_s=90.0),
              head=Ports(unit="mW", units_per_w=1e3, zero1=0.0008, zero2=0.00008, noise1=2e-4, noise2=8e-6, top=20.0,
                         leakage=((0.97, 0.0005), (0.0006, 0.96))),
              limit=LimitPlan(quantity="er_db", alarm=20.0, warning=23.0), firmware="bench pc 1.2", flicker=0.004),
    BenchPlan(name="S2", room="South Hall", experiment="Gyro coil ageing", owner=STUDENT, experiment_owner=STUDENT,
              tap="coil-out", laser="S2 laser", power_w=0.5e-3,
              path=_pm(29.05, 31.0, length_m=8.0, wavelength_m=1550e-9, phase0_rad=1.1, lag_s=200.0),
              head=Ports(unit="uW", units_per_w=1e6, zero1=0.5, zero2=0.12, noise1=0.03, noise2=0.004, top=1500.0),
              limit=LimitPlan(quantity="er_db", alarm=25.0, warning=27.0, deadband=2.0), firmware="bench board 1.4",
              buffer_s=2 * 3600.0 + 2400.0),
    BenchPlan(name="N4", room="North Hall", experiment="Hydrophone interferometer leads", owner=STUDENT,
              experiment_owner=STUDENT, tap="lead-end", laser="N4 laser", power_w=0.8e-3,
              path=PlainFibre(deg_per_k=5.0, lag_s=60.0, walk_deg_per_root_day=0.8, relaxes_days=1.0, offset_deg=12.8,
                              is_thermal_outward=True),
              head=Ports(unit="V", units_per_w=2000.0, zero1=0.004, zero2=0.003, noise1=3e-4, noise2=3e-4, top=1.628,
                         gain_ratio=1.05, step=1e-4, has_spread=True),
              limit=LimitPlan(quantity="er_db", alarm=15.0, warning=17.0), firmware="bench board 1.3",
              buffer_s=2 * 3600.0),
    BenchPlan(name="V1", room="Vault", experiment="Modulation-noise study", owner=MANAGER, experiment_owner=RESEARCHER,
              tap="eom-out", laser="V1 laser", power_w=1.0e-3,
              path=_pm(32.6, 33.4, length_m=4.0, wavelength_m=1550e-9, phase0_rad=0.9, lag_s=120.0, rad_per_k=30.0),
              head=Ports(unit="count", units_per_w=5.2e7, zero1=61.0, zero2=58.0, noise1=3.0, noise2=0.15, top=65535.0,
                         step=0.01),
              limit=LimitPlan(quantity="er_db", alarm=23.0, warning=25.0), firmware="bench pc 2.0", flicker=0.003),
    BenchPlan(name="V2", room="Vault", experiment="PM coupler ageing", owner=MANAGER, experiment_owner=MANAGER,
              tap="coupler-out", laser="V2 laser", power_w=1.5e-3,
              path=_pm(30.75, 31.25, length_m=2.0, wavelength_m=1550e-9, phase0_rad=0.2, lag_s=120.0, rad_per_k=30.0),
              head=Ports(unit="mW", units_per_w=1e3, zero1=0.0008, zero2=0.0002, noise1=1e-4, noise2=4e-6, top=5.0),
              limit=LimitPlan(quantity="er_db", alarm=20.0, warning=23.0), firmware="bench board 1.4", flicker=0.003,
              buffer_s=6 * 3600.0),
    BenchPlan(name="S3", room="South Hall", experiment="Two-kilometre reel", owner=MANAGER, experiment_owner=MANAGER,
              tap="reel-end", laser="S3 laser", power_w=0.6e-3,
              path=PlainFibre(deg_per_k=4.2, lag_s=1800.0, walk_deg_per_root_day=1.5, relaxes_days=2.0, offset_deg=1.5),
              head=Polarimeter(unit="mW", units_per_w=1e3, dop=0.9975, noise=0.002, azimuth_rad=np.radians(89.7),
                               ellipticity_rad=np.radians(10.0)),
              limit=LimitPlan(quantity="angle_deg", alarm=20.0, warning=14.0), firmware="polarimeter pc 2.6", buffer_s=0.0),
    BenchPlan(name="S4", room="South Hall", experiment="Light to the clean room", owner=MANAGER, experiment_owner=MANAGER,
              tap="clean-room", laser="S4 laser", power_w=0.3e-3,
              path=_pm(22.5, 26.0, length_m=40.0, wavelength_m=1550e-9, phase0_rad=0.0, lag_s=600.0),
              head=Ports(unit="uW", units_per_w=1e6, zero1=0.3, zero2=0.2, noise1=0.03, noise2=0.006, top=1000.0),
              limit=LimitPlan(quantity="er_db", alarm=20.0, warning=22.0), firmware="bench board 1.4",
              buffer_s=3 * 3600.0),
)


def bench_named(name: str) -> BenchPlan:
    """The bench of that name, capital letters as in the ledger."""
    return next(bench for bench in BENCHES if bench.name == name)
