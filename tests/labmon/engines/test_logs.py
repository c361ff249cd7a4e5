"""Logs stay small while their writers go on."""

from labmon.engines.logs import trim_logs


def test_large_log_is_set_aside_and_its_writer_goes_on(tmp_path):
    path = tmp_path / "web.log"
    with path.open("ab", buffering=0) as writer:
        writer.write(b"old" * 100)
        trim_logs(tmp_path, largest_bytes=100)
        writer.write(b"new")
    assert path.read_bytes() == b"new"
    assert (tmp_path / "web.log.1").read_bytes() == b"old" * 100


def test_small_log_is_left_alone(tmp_path):
    (tmp_path / "web.log").write_bytes(b"x")
    trim_logs(tmp_path, largest_bytes=100)
    assert [path.name for path in tmp_path.iterdir()] == ["web.log"]
