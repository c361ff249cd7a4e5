from ingest.files.columns import COLUMNS, NEEDED, needed_words
from ingest.files.units import QUANTITY_OF
from ingest.models import TapKind


def test_every_column_has_a_quantity_and_every_need_is_a_column():
    for kind, columns in COLUMNS.items():
        assert set(columns) <= QUANTITY_OF.keys()
        assert all(group <= set(columns) for group in NEEDED[kind])
    assert needed_words("two-port") == "port1 and port2"
    assert needed_words("climate") == "temperature_c, or humidity_pct, or pressure_hpa"


def test_kinds_are_those_of_the_taps():
    assert set(COLUMNS) == set(NEEDED) == set(TapKind.values)
