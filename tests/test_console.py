"""leveller.console and leveller.report.text: plain off a terminal, fitting on one; a name is never more than text."""

from __future__ import annotations

import dataclasses
import io
import re
import sys

import pytest

from leveller import console
from leveller.report.records import DeliveryFigures, Fault, MixFigures, OtherFigures, Report, VoiceFigures
from leveller.report.text import Line, cells, format_summary, places_text, summary_blocks, visible

ESCAPE = "\x1b"


class Screen(io.StringIO):
    """A terminal that keeps what it was sent."""

    def isatty(self) -> bool:
        """It is one."""
        return True


def voice(name: str) -> VoiceFigures:
    """A voice with figures as wide as they get."""
    return VoiceFigures(
        name, 7384.2, -41.3, -19.0, -70.1, -60.2, -10.4, -28.4, 22.3, 22.3, 22.3, -6.0, -6.0, -18.0, 18.0)


MIX = MixFigures(
    channels=1, rate_hz=48000, length_s=3725.0, integrated_lufs=-19.004, two_channels_lufs=-15.994, range_lu=5.2,
    max_short_term_lufs=-15.3, max_short_term_s=3661.0, max_momentary_lufs=-12.9, max_momentary_s=59.9,
    true_peak_dbtp=-1.03, true_peak_s=3725.0, speech_lufs=-18.5, make_up_db=4.7, limiting_most_db=7.1,
    limiting_most_s=60.0, limiting_total_s=12.4, limiting_heavy_pct=0.02)
DELIVERY = DeliveryFigures("podcast-mono", "common practice, no source", True, "", -19.0, -1.0)
CLIPPED = Fault("clipped", "Odo", "Odo: clipped in 6 places", tuple((60.0 * n, 60.0 * n + 0.1) for n in range(6)))
REPORT = Report(
    "The Shelf", DELIVERY, MIX, (voice("Maren"), voice("Odo")), (OtherFigures("music", "bed", -3.0),), (CLIPPED,),
    ("the limiter takes up to 7.1 dB (at 0:01:00), and more than 6 dB is heard: listen there, or choose a lower "
     "target",))


def texts(report: Report, *, width: int | None = None) -> list[str]:
    """The lines of a summary."""
    return [line.text for line in format_summary(report, out="levelled/The Shelf", width=width)]


def test_summary_says_the_delivery_first() -> None:
    """The first line says whether the delivery is met, and what the mix reads."""
    assert texts(REPORT)[0] == "Delivery met: -19.00 LUFS, true peak -1.03 dBTP"
    missed = dataclasses.replace(REPORT, delivery=dataclasses.replace(DELIVERY, met=False, why_not="only -80.0 LUFS"))
    assert texts(missed)[0] == "Delivery NOT met: only -80.0 LUFS"


def test_summary_word_for_word() -> None:
    """The blocks in their order: delivery, voices, other tracks, mix, sources, what is left open, where it lies."""
    assert texts(REPORT) == [
        "Delivery met: -19.00 LUFS, true peak -1.03 dBTP",
        "podcast-mono asks for -19.0 LUFS and at most -1.0 dBTP",
        "The Shelf: 1:02:05, one channel at 48000 Hz",
        "",
        "                speech, LUFS others, dB   noise, LUFS  gain moved, dB",
        "Voice   speaks     in   out     in   out     in   out   trim ride comp close",
        "Maren  2:03:04  -41.3 -19.0  -10.4 -28.4  -70.1 -60.2  +22.3 -6.0 -6.0 -18.0",
        "Odo    2:03:04  -41.3 -19.0  -10.4 -28.4  -70.1 -60.2  +22.3 -6.0 -6.0 -18.0",
        "in: the source; out: its stem, before the limiter",
        "others: while only others speak, against own speech; noise: while nobody speaks",
        "",
        "Other tracks",
        "  music: bed, -3.0 dB",
        "",
        "Mix",
        "  integrated        -19.00 LUFS  -15.99 on two channels",
        "  speech            -18.50 LUFS",
        "  range               5.2  LU",
        "  short-term, most  -15.3  LUFS  at 1:01:01",
        "  momentary, most   -12.9  LUFS  at 0:00:59",
        "  true peak          -1.03 dBTP  at 1:02:05",
        "  make-up gain       +4.70 dB",
        "  limiting, most      7.1  dB    at 0:01:00; 12.4 s in all, over 3 dB for 0.02 %",
        "",
        "Sources",
        "  Odo: clipped in 6 places: 0:00:00, 0:01:00, 0:02:00, 0:03:00 and 2 more",
        "",
        "Left open",
        "  the limiter takes up to 7.1 dB (at 0:01:00), and more than 6 dB is heard: listen there, or choose a lower "
        "target",
        "",
        "Written to levelled/The Shelf",
    ]


def test_the_page_gets_tables_and_sentences() -> None:
    """For the page the voices are rows of cells, and no figure of the mix depends on columns of spaces."""
    blocks = dict(summary_blocks(REPORT))
    assert [line.split("\t") for line in blocks["Voices"] if "\t" in line] == [
        ["Voice, speaks", "", "speech, LUFS", "others, dB", "noise, LUFS"],
        *([name, "in", "-41.3", "-10.4", "-70.1"] if row == "in" else ["2:03:04", "out", "-19.0", "-28.4", "-60.2"]
          for name in ("Maren", "Odo") for row in ("in", "out")),
        ["Gain moved", "trim, dB", "ride, dB", "comp, dB", "close, dB"],
        *([name, "+22.3", "-6.0", "-6.0", "-18.0"] for name in ("Maren", "Odo"))]
    assert blocks["Mix"][0] == "integrated: -19.00 LUFS, -15.99 on two channels"
    assert blocks["Mix"][2] == "range: 5.2 LU"
    named = dataclasses.replace(REPORT, voices=(voice("a\tb"),))
    assert "a?b\tin" in "\n".join(dict(summary_blocks(named))["Voices"])


@pytest.mark.parametrize("width", [80, 100, 140])
@pytest.mark.parametrize("name", ["Odo", "Генрих Александрович-Заболоцкий из студии", "東京都港区のとても長い名前"])
def test_terminal_lines_fit(width: int, name: str) -> None:
    """No line is wider than the terminal, whatever the names; a long name ends in an ellipsis."""
    report = dataclasses.replace(REPORT, voices=(voice(name), voice("Maren")))
    lines = texts(report, width=width)
    assert max(map(cells, lines)) <= width
    assert any(line.startswith(name[:4]) for line in lines)


def test_columns_line_up_behind_wide_letters() -> None:
    """Wide and combining letters count as they are drawn."""
    report = dataclasses.replace(REPORT, voices=(voice("東京"), voice("e\u0301a"), voice("Maren")))
    rows = [line for line in texts(report) if "2:03:04" in line]
    assert len(rows) == 3
    assert len({cells(row[: row.index("2:03:04")]) for row in rows}) == 1


def test_names_stay_text() -> None:
    """Markup in a name is printed as it is; control characters and turned writing never reach the screen."""
    name = "[red]Odo[/red] :smile:"
    hostile = dataclasses.replace(REPORT, title="a\x1b[31mb\u202ec\nd", voices=(voice(name),))
    plain, screen = io.StringIO(), Screen()
    lines = format_summary(hostile, out="x\ny")
    console.print_lines(lines, plain)
    console.print_lines(lines, screen)
    for text in (plain.getvalue(), re.sub(r"\x1b\[[0-9;]*m", "", screen.getvalue())):
        assert name in text
        assert "a?[31mb?c?d" in text
        assert "x?y" in text
    assert ESCAPE not in plain.getvalue()


def test_plain_off_a_terminal() -> None:
    """Off a terminal a line stays one line without colour, however long it is."""
    stream = io.StringIO()
    console.print_lines([Line("x" * 500, "bad"), Line("y", "good")], stream)
    assert stream.getvalue() == "x" * 500 + "\ny\n"


def test_colour_only_where_it_is_wanted(monkeypatch: pytest.MonkeyPatch) -> None:
    """A terminal gets colour, unless NO_COLOR is set or it is dumb."""
    monkeypatch.setenv("TERM", "xterm-256color")
    monkeypatch.delenv("NO_COLOR", raising=False)

    def sent() -> str:
        screen = Screen()
        console.print_lines([Line("met", "good")], screen)
        return screen.getvalue()

    assert "\x1b[32mmet" in sent()
    monkeypatch.setenv("NO_COLOR", "1")
    assert "\x1b[32m" not in sent()
    assert "met" in sent()
    monkeypatch.setenv("TERM", "dumb")
    assert sent() == "met\n"


def test_long_lines_are_not_broken_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    """The printer folds nothing by itself: what is a line stays one."""
    monkeypatch.setenv("TERM", "xterm")
    screen = Screen()
    console.print_lines([Line("word " * 60)], screen)
    assert screen.getvalue().count("\n") == 1


def test_an_error_is_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    """A message that holds line breaks or escapes is still one line of plain text."""
    console.print_error("a\nb\x1b[31m.wav: no such file")
    assert capsys.readouterr().err == "leveller: a\\nb\\x1b[31m.wav: no such file\n"


def test_places() -> None:
    """A moment is one time, a stretch two; the rest is counted."""
    assert places_text([(5.0, 5.1)]) == "0:00:05"
    assert places_text([(5.0, 65.0), (3600.0, 3600.0)]) == "0:00:05 to 0:01:05, 1:00:00"
    assert places_text([(float(n), float(n)) for n in range(6)]).endswith("0:00:03 and 2 more")


def test_visible_keeps_what_can_be_read() -> None:
    """Letters of any script, spaces and quotes stay."""
    for text in ("Ána \"A\" 'x'", "東京", "שלום", "🎙 one"):
        assert visible(text) == text


def test_pace_foresees_the_rest() -> None:
    """Half of the work in ten seconds leaves ten; a repeated stage does not go back."""
    clock = [0.0]
    pace = console.Pace({"measure": 0.5, "render": 0.5}, now=lambda: clock[0])
    assert pace.left_s is None
    clock[0] = 10.0
    pace.update("measure", 60, 60)
    assert (pace.part, pace.left_s) == (0.5, 10.0)
    pace.update("render", 60, 60)
    pace.update("render", 1, 60)
    pace.update("unknown", 1, 2)
    assert pace.part == pytest.approx(1.0)
    assert pace.left_s == pytest.approx(0.0)


def test_a_stage_that_is_done_gives_way() -> None:
    """Between measuring and rendering the stage that reports nothing is named."""
    pace = console.Pace(console.PROCESS_SHARES)
    pace.update("measure", 59, 60)
    assert pace.stage == "measure"
    pace.update("measure", 60, 60)
    assert pace.stage == "decide"
    pace.update("mix", 60, 60)
    assert pace.stage == "mix"


def test_stages_are_shares_of_the_whole() -> None:
    """The shares of every kind of work add up to one."""
    for shares in (console.PROCESS_SHARES, console.READ_SHARES):
        assert sum(shares.values()) == pytest.approx(1)


def drawn(monkeypatch: pytest.MonkeyPatch, wait_s: float, *, quiet: bool = False) -> str:
    """What a piece of work sends to a terminal."""
    screen = Screen()
    monkeypatch.setattr(sys, "stderr", screen)
    monkeypatch.setattr(console, "WAIT_S", wait_s)
    monkeypatch.setenv("TERM", "xterm")
    with console.progress(console.PROCESS_SHARES, quiet=quiet) as on_progress:
        for stage in console.PROCESS_SHARES:
            on_progress(stage, 33, 60)
    return screen.getvalue()


def test_progress_is_shown_for_long_work_only(monkeypatch: pytest.MonkeyPatch) -> None:
    """Work that lasts shows stage, part and time left; short work and --quiet show nothing."""
    shown = drawn(monkeypatch, 0.0)
    assert "mix" in shown
    assert "94 %" in shown
    assert re.search(r"\d:\d\d:\d\d left", shown)
    assert drawn(monkeypatch, 60.0) == ""
    assert drawn(monkeypatch, 0.0, quiet=True) == ""


def test_no_progress_off_a_terminal(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """A pipe gets no progress."""
    monkeypatch.setattr(console, "WAIT_S", 0.0)
    with console.progress(console.READ_SHARES) as on_progress:
        on_progress("read", 1, 2)
    assert capsys.readouterr().err == ""
