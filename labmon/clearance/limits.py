"""Which limits a clearance is about: those on the angle, or on the extinction ratio, which is one."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import angle_rad_from_er_db
from ingest.models import Tap
from labmon.experiments.models import Experiment, LimitVersion

ON_ANGLE: Final = (Quantity.ER_DB, Quantity.ANGLE_DEG)


@dataclass(frozen=True, slots=True)
class AskedLimit:
    """A limit as it stood when the question was put; ``alarm`` in the quantity's unit."""

    limit_id: int
    tap: Tap
    quantity: Quantity
    alarm: float

    @property
    def limit_rad(self) -> float:
        """The alarm level as an angle on the sphere, rad."""
        if self.quantity is Quantity.ER_DB:
            return float(angle_rad_from_er_db(self.alarm))
        return float(np.radians(self.alarm))

    @property
    def tap_name(self) -> str:
        """``station/tap``."""
        return f"{self.tap.station.name}/{self.tap.name}"


def limits_at(experiment: Experiment, at: datetime) -> list[AskedLimit]:
    """The experiment's limits in force at a moment, by tap; before a limit's first version, that one. One query."""
    versions = LimitVersion.objects.filter(limit__experiment=experiment, limit__quantity__in=[one.value for one in ON_ANGLE])
    rows = list(versions.select_related("limit__tap__station").order_by("limit_id", "number"))
    return asked_limits(_in_force(rows, at))


def asked_limits(versions: Iterable[LimitVersion]) -> list[AskedLimit]:
    """Versions as they are asked about, by tap; others than on ER and angle are left out."""
    asked = [AskedLimit(version.limit_id, version.limit.tap, Quantity(version.limit.quantity), version.alarm)
             for version in versions if not version.is_retired and version.limit.quantity in ON_ANGLE]
    return sorted(asked, key=lambda one: (one.tap_name, one.quantity))


def _in_force(rows: Iterable[LimitVersion], at: datetime) -> list[LimitVersion]:
    found: dict[int, LimitVersion] = {}
    for version in rows:
        if version.limit_id not in found or version.valid_from <= at:
            found[version.limit_id] = version
    return list(found.values())
