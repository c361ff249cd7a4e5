"""Which benches and experiments an audit entry is about, so that their owners find it."""

from django.db.models import Model


def places_of(subject: Model | str) -> list[str]:
    """``station/b08`` and ``experiment/3``, each once; none where the entry is about the lab or a person."""
    if isinstance(subject, str):
        kind, _, rest = subject.partition("/")
        return [f"station/{rest.partition('/')[0]}"] if kind in {"station", "tap"} else []
    match subject._meta.model_name:
        case "station":
            return [f"station/{subject.name}"]
        case "tap":
            return [f"station/{subject.station.name}"]
        case "experiment":
            return [f"experiment/{subject.pk}", *_stations(subject.taps)]
        case "run":
            return [f"experiment/{subject.experiment_id}", *_stations(subject.taps)]
        case "limit":
            return [f"experiment/{subject.experiment_id}", f"station/{subject.tap.station.name}"]
    return _of_what_hangs_on_a_tap(subject)


def _of_what_hangs_on_a_tap(subject: Model) -> list[str]:
    """An alarm, a hold, a doubt: by its tap, its experiment and its run, as far as it has them."""
    places = []
    if getattr(subject, "experiment_id", None):
        places.append(f"experiment/{subject.experiment_id}")
    if getattr(subject, "run_id", None):
        places += places_of(subject.run)
    if getattr(subject, "tap_id", None):
        places.append(f"station/{subject.tap.station.name}")
    if getattr(subject, "station_id", None):
        places.append(f"station/{subject.station.name}")
    return list(dict.fromkeys(places))


def _stations(taps) -> list[str]:
    return [f"station/{name}" for name in taps.order_by("station__name").values_list("station__name", flat=True).distinct()]
