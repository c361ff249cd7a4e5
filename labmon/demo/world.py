"""The invented lab as a function of time: any piece of the time axis, always the same numbers for the same seed."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from analysis.fibre.sphere import sop_of_angles
from labmon.demo.air import ROOMS, RoomAir, pressure_hpa
from labmon.demo.benches import BenchPlan, Polarimeter, Ports
from labmon.demo.faults import Ledger
from labmon.demo.ledger import LEDGER
from labmon.demo.moments import DAY_S
from labmon.demo.paths import PlainFibre, sop_of_displacement
from labmon.demo.ports import Columns, read_ports, read_stokes
from labmon.demo.seeds import white_per_second
from labmon.demo.source import power_factor

FloatArray = NDArray[np.float64]
SEED = 20_310_304


@dataclass(slots=True)
class World:
    """All rooms and benches from day 1 to the end of day ``days``."""

    days: int
    seed: int = SEED
    ledger: Ledger = LEDGER
    air: dict[str, RoomAir] = field(init=False)

    def __post_init__(self) -> None:
        self.air = {plan.name: RoomAir(plan, self.seed, self.days, self.ledger) for plan in ROOMS}

    def covers(self, at_s: float) -> bool:
        """True while the simulated days reach that moment."""
        return at_s < self.days * DAY_S

    def leak(self, bench: BenchPlan, at_s: FloatArray) -> FloatArray:
        """True share of the light in the unwanted state, shape (N,)."""
        air = self.air[bench.room]
        if isinstance(bench.path, PlainFibre):
            return bench.path.leak(bench.name, bench.laser, at_s, air, self.ledger, self.seed)
        return bench.path.leak(bench.name, bench.laser, at_s, air, self.ledger)

    def sop(self, bench: BenchPlan, at_s: FloatArray) -> FloatArray:
        """True unit Stokes vectors of a Stokes bench, shape (N, 3)."""
        assert isinstance(bench.path, PlainFibre)
        moved = bench.path.displacement_rad(bench.name, bench.laser, at_s, self.air[bench.room], self.ledger, self.seed)
        return sop_of_displacement(moved, wanted_state(bench))

    def readings(self, bench: BenchPlan, at_s: FloatArray) -> Columns:
        """Raw columns that the bench's station reads at sorted times, each shape (N,)."""
        air = self.air[bench.room]
        factor = power_factor(bench.laser, bench.flicker, at_s, air, self.ledger, self.seed)
        total_w = bench.power_w * factor
        temperature_c = air.at(at_s)
        if isinstance(bench.head, Polarimeter):
            return read_stokes(bench, bench.head, total_w, self.sop(bench, at_s), at_s, self.ledger, self.seed)
        return read_ports(bench, bench.head, total_w, self.leak(bench, at_s), at_s, temperature_c, air.plan.mean_c,
                          self.ledger, self.seed)

    def spare_readings(self, bench: BenchPlan, at_s: FloatArray) -> Columns:
        """What a spare board without any light would send in the bench's name."""
        assert isinstance(bench.head, Ports)
        nothing = np.zeros(len(at_s))
        return read_ports(bench, bench.head, nothing, nothing, at_s, self.air[bench.room].at(at_s),
                          self.air[bench.room].plan.mean_c, Ledger(()), self.seed + 1)

    def climate(self, room: str, at_s: FloatArray) -> Columns:
        """Columns of the room's climate tap, each shape (N,)."""
        air = self.air[room]
        return {"temperature_c": air.at(at_s) + 0.01 * white_per_second(self.seed, f"{room} thermometer", at_s),
                "humidity_pct": air.humidity_pct(at_s) + 0.2 * white_per_second(self.seed, f"{room} hygrometer", at_s),
                "pressure_hpa": pressure_hpa(at_s) + 0.03 * white_per_second(self.seed, f"{room} barometer", at_s)}


def wanted_state(bench: BenchPlan) -> FloatArray:
    """The state a Stokes bench should have, shape (3,)."""
    assert isinstance(bench.head, Polarimeter)
    return sop_of_angles(bench.head.azimuth_rad, bench.head.ellipticity_rad)
