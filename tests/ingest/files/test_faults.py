from ingest.files.faults import MappingError, MappingFault


def test_a_fault_reads_as_key_value_why_and_remedy():
    faults = [MappingFault("time.zone", "X", "is no time zone", "write UTC"),
              MappingFault("columns", None, "is empty", "fill it")]
    assert str(MappingError(faults)).splitlines() == ['time.zone = "X": is no time zone; write UTC',
                                                      "columns = (missing): is empty; fill it"]


def test_a_long_value_is_cut():
    assert len(str(MappingFault("a", "x" * 500, "w", "d"))) < 100
