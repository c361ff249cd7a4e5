import io

from labmon.management.progress_bar import ProgressBar


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_on_a_terminal_one_line_is_redrawn():
    out = Terminal()
    bar = ProgressBar(out, "rows")
    for done in range(1001):
        bar.show(done, 1000)
    bar.show(1000, 1000, is_last=True)
    assert out.getvalue().count("\n") == 1 and out.getvalue().startswith("\r[")
    assert out.getvalue().rstrip().split("\r")[-1].startswith("[" + "=" * 30 + "] 100%  1000 rows")


def test_elsewhere_one_line_a_tenth():
    out = io.StringIO()
    bar = ProgressBar(out, "rows")
    for done in range(1001):
        bar.show(done, 1000)
    bar.show(1000, 1000, is_last=True)
    assert len(out.getvalue().splitlines()) == 12


def test_an_empty_piece_of_work_is_done_at_the_end():
    out = io.StringIO()
    ProgressBar(out, "rows").show(0, 0, is_last=True)
    assert "100%  0 rows" in out.getvalue()
