import pytest

from ingest.files.mapping import mapping_from_toml
from ingest.files.origin import boot_of, is_from_file

TEXT = '[file]\ndelimiter = ";"\n[time]\ncolumn = "t"\nzone = "UTC"\n[columns]\nport2 = "b"\n'


def boot(text: str) -> str:
    return boot_of(mapping_from_toml(text, kind="dark-port", unit="mW"))


def test_a_layout_does_not_change_the_origin():
    assert boot(TEXT) == boot(TEXT.replace('delimiter = ";"', 'decimal = ","\ndelimiter = "tab"\nmissing = "-"'))
    assert is_from_file(boot(TEXT)) and not is_from_file("7f3a9c21")


@pytest.mark.parametrize(("old", "new"), [('"UTC"', '"+01:00"'), ('port2 = "b"', 'port2 = "c"'),
                                          ('"b"', '{ column = "b", factor = 2 }'),
                                          ('"b"', '{ column = "b", unit = "uW" }')])
def test_times_and_values_do(old, new):
    assert boot(TEXT) != boot(TEXT.replace(old, new))
