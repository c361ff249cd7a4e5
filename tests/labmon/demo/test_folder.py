"""Keys and passwords lie in one file that only its owner can read."""

import stat

from labmon.demo.folder import DemoNotes, notes_path, read_notes, write_notes


def test_notes_come_back_and_are_private(settings, tmp_path):
    settings.DATA_DIR = tmp_path
    assert read_notes() is None
    notes = DemoNotes(day_one_us=1, seed=2, is_built=True, passwords={"maren": "x"}, station_keys={"n1": "k"})
    write_notes(notes)
    assert read_notes() == notes
    assert stat.S_IMODE(notes_path().stat().st_mode) == 0o600
    assert stat.S_IMODE(notes_path().parent.stat().st_mode) == 0o700
