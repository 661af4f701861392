"""Hostile session files, tables and headers: an error of our own or a session, never a traceback, a hang, a stray file.

Hypothesis draws the input without chance from run to run; the long tier draws more of it. What is accepted is carried
on to where it would do harm: each track's stem is asked for its place in the output folder, and audio is read.
"""

from __future__ import annotations

import contextlib
import csv
import resource
import shutil
import struct
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from leveller.attribute import attribute
from leveller.automation import NO_ROWS, harmless, read_automation, text_cell, track_index
from leveller.edits import SPEECH_COLUMNS, is_speech_table, with_speech_table
from leveller.errors import LevellerError, OutputError
from leveller.folder import OutputFolder
from leveller.measure import measure
from leveller.names import safe_name, unique_names, why_unsafe
from leveller.pipeline import process
from leveller.reading import measure_files
from leveller.session import open_session
from leveller.sessionfile import CORRECTION_KEYS, SESSION_KEYS, SKIP_KEYS, TRACK_KEYS, read_corrections
from leveller.spreadsheet import read_rows
from leveller.units import frames_to_hops

RATE_HZ = 8000
SLOWEST_S = 10.0  # of the processor, since a busy disk is no fault; own choice: an example takes milliseconds
MOST_BYTES = 500 << 20  # own choice: what the process may grow by while a header lies to it
QUICK, LONG = 60, 1500  # examples
EVIL_NAMES = ("..", ".", "../../out", "/etc/passwd", "C:\\x", "a/b", "a\\b", "NUL", "con.wav", "COM1", "x" * 300,
              "a\nb", "a\0b", "\x1b[2J", "\u202e", " ", "", "-", "=1+1", "@SUM(1)", "'=x", "\uff1d1", "<b>")


def fuzz(count: int) -> Callable[[Any], Any]:
    """Settings of a property: the same examples each time."""
    return settings(max_examples=count, deadline=None, derandomize=True, database=None,
                    suppress_health_check=list(HealthCheck))


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder `in` with two short files, and room beside it."""
    folder = tmp_path_factory.mktemp("hostile")
    (folder / "in").mkdir()
    for seed, name in enumerate("ab"):
        noise = np.random.default_rng(seed).standard_normal(RATE_HZ).astype(np.float32) / 10
        soundfile.write(folder / "in" / f"{name}.wav", noise, RATE_HZ)
    return folder


@contextlib.contextmanager
def bounded(place: Path) -> Iterator[None]:
    """An error of our own is fine; time, memory and files beside the input are not."""
    before = sorted(place.parent.glob("*")), sorted(place.iterdir())
    begun, held = time.process_time(), resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    with contextlib.suppress(LevellerError):
        yield
    assert time.process_time() - begun < SLOWEST_S
    assert (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - held) * 1024 < MOST_BYTES
    assert (sorted(place.parent.glob("*")), sorted(place.iterdir())) == before


def stems_stay_inside(session: Any, place: Path) -> None:
    """Every stem's file, and the folder named after the title, is where it should be."""
    folder = OutputFolder(place / safe_name(session.title), replace=False)
    assert folder.path.parent == place
    for track in session.tracks:
        assert not why_unsafe(track.name)
        assert (folder.work / "stems" / f"{track.name}.wav").resolve().parent == folder.work / "stems"


# session.toml

scalars = st.one_of(
    st.integers(), st.integers(-3, 3), st.floats(), st.booleans(), st.sampled_from(EVIL_NAMES), st.text(max_size=20),
    st.sampled_from(["a.wav", "b.wav", "../in/a.wav", "own", "voice", "bed", "room", "split", "auto", "r128"]),
    st.sampled_from([10**400, -(10**400), 1e308, float("nan"), float("inf")]))
values = st.one_of(
    scalars, st.lists(scalars, max_size=3), st.dictionaries(st.text("abc", min_size=1), scalars, max_size=2))
STAGE_KEYS = ("enabled", "range_db", "ratio", "lookahead_s", "most_db")


def toml_value(value: Any) -> str:
    """A value as TOML has it."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return '"' + "".join(c if c.isalnum() and c.isascii() else f"\\U{ord(c):08x}" for c in value
                             if not 0xD800 <= ord(c) < 0xE000) + '"'
    if isinstance(value, list):
        return "[" + ", ".join(map(toml_value, value)) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {toml_value(part)}" for key, part in value.items()) + "}"
    return str(value)


def table(keys: tuple[str, ...]) -> st.SearchStrategy[dict[str, Any]]:
    """A table with some of these keys and any values."""
    return st.dictionaries(st.sampled_from(keys), values, max_size=4)


@st.composite
def session_files(draw: st.DrawFn) -> str:
    """A session.toml that is TOML, and little else."""
    lines = [f"{key} = {toml_value(value)}" for key, value in draw(table(SESSION_KEYS[:6])).items()]
    if draw(st.booleans()):
        lines.append(f"[{draw(st.sampled_from(SESSION_KEYS[-5:]))}]")
        lines += [f"{key} = {toml_value(value)}" for key, value in draw(table(STAGE_KEYS)).items()]
    for name, keys in (("track", TRACK_KEYS), ("skip", SKIP_KEYS), ("correction", CORRECTION_KEYS)):
        for entry in draw(st.lists(table(keys), max_size=2)):
            entry = {"file": "a.wav", **entry} if name == "track" else entry
            lines += [f"[[{name}]]", *(f"{key} = {toml_value(value)}" for key, value in entry.items())]
    return "\n".join(lines)


def any_session_file(place: Path, content: bytes) -> None:
    """Open a session with that session.toml."""
    file = place / "in" / "session.toml"
    file.write_bytes(content)
    with bounded(place):
        stems_stay_inside(open_session([file]), place)


@fuzz(QUICK)
@given(text=session_files())
def test_session_files(place: Path, text: str) -> None:
    """Any values under any keys: a session or an error of our own."""
    any_session_file(place, text.encode())


@pytest.mark.parametrize("text", [
    f"[expander]\nrange_db = 1{'0' * 400}", f"sample_rate = {'9' * 5000}", f"title = {'[' * 5000}",
    "[expander]\nratio = nan",
    "[[track]]\nfile = 'a.wav'\noffset_s = 604800", "[[track]]\nfile = 'a.wav'\npolarity = nan",
    f"[[track]]\nfile = '{'x' * 300}.wav'", "[[track]]\nfile = '.'", "[[track]]\nfile = '/dev/zero'"], ids=range(9))
def test_session_files_that_harmed_once_or_might(place: Path, text: str) -> None:
    """Numbers beyond any type, endless lists, devices: an error of our own."""
    file = place / "in" / "session.toml"
    file.write_text(text)
    with bounded(place), pytest.raises(LevellerError) as found:
        open_session([file])
    assert "\n" not in str(found.value)


@fuzz(QUICK)
@given(content=st.one_of(
    st.binary(max_size=300), st.text(max_size=300).map(lambda text: text.encode("utf-8", "replace"))))
def test_session_files_of_noise(place: Path, content: bytes) -> None:
    """Any bytes: a session or an error of our own."""
    any_session_file(place, content)


@pytest.mark.long
@fuzz(LONG)
@given(text=session_files())
def test_many_session_files(place: Path, text: str) -> None:
    """The same, many times."""
    any_session_file(place, text.encode())


@pytest.mark.parametrize("name", EVIL_NAMES, ids=ascii)
def test_no_name_leaves_the_folder(name: str, place: Path, tmp_path: Path) -> None:
    """A run with an evil name as title and as a track's name writes into its own folder, or is refused."""
    source = tmp_path / "in"
    source.mkdir()
    (source / "a.wav").write_bytes((place / "in" / "a.wav").read_bytes())
    (source / "session.toml").write_text(
        f'title = {toml_value(name)}\n[[track]]\nfile = "a.wav"\nname = {toml_value(name)}\n', encoding="utf-8")
    before = source.stat().st_mtime_ns, (source / "a.wav").read_bytes()
    with contextlib.suppress(LevellerError):
        result = process(source, out=tmp_path / "here" / "out")
        stems = [path.stem for path in (tmp_path / "here" / "out" / "stems").iterdir()]
        assert stems == [result.session.tracks[0].name]
    assert {path.name for path in tmp_path.iterdir()} <= {"in", "here"}
    assert before == (source.stat().st_mtime_ns, (source / "a.wav").read_bytes())


def test_links_do_not_lead_out(place: Path, tmp_path: Path) -> None:
    """Neither a link in the folder's place nor one among what a dead run left makes anything outside change."""
    (tmp_path / "precious").mkdir()
    (tmp_path / "precious" / "file").write_text("kept")
    (tmp_path / "out").symlink_to("precious")
    with pytest.raises(OutputError, match="exists and is no folder"):
        process(place / "in" / "a.wav", out=tmp_path / "out", replace=True)
    (tmp_path / "out").unlink()
    (tmp_path / ".out.part-999999999").symlink_to("precious")
    process(place / "in" / "a.wav", out=tmp_path / "out")
    assert (tmp_path / "precious" / "file").read_text() == "kept"
    assert (tmp_path / "out" / "mix.wav").exists()


# Tables

cells = st.one_of(
    st.sampled_from(["0", "0.5", "1", "1,5", "-3", "1e999", "1e307", "nan", "-inf", "1e-320", "9" * 500, "a", "b",
                     "own", "", "=1+1", "-0", "1_0", "\u0663", "1.234,5", '="1"', "\u22123", "x" * 200_000, "a\0b"]),
    st.text(max_size=6), st.floats().map(str))
COLUMNS = {"automation": ("time_s", "track", "gain_db", "auto_trim_db", "state", "cause"),
           "speech": SPEECH_COLUMNS, "corrections": CORRECTION_KEYS}


@st.composite
def tables(draw: st.DrawFn) -> tuple[str, bytes]:
    """A kind of table, and one with its header."""
    kind = draw(st.sampled_from(list(COLUMNS)))
    quote, delimiter = draw(st.booleans()), draw(st.sampled_from(",;\t"))
    rows = [list(COLUMNS[kind]), *draw(st.lists(st.lists(cells, min_size=3, max_size=6), max_size=4))]
    lines = [delimiter.join('"' + cell.replace('"', '""') + '"' if quote else cell for cell in row) for row in rows]
    text = draw(st.sampled_from(["\n", "\r\n", "\r"])).join(lines)
    return kind, text.encode(draw(st.sampled_from(["utf-8", "utf-8-sig", "utf-16"])), "replace")


@pytest.fixture(scope="module")
def opened(place: Path) -> tuple[Any, Any]:
    """The session of a.wav and b.wav, attributed."""
    session = open_session([place / "in" / "a.wav", place / "in" / "b.wav"])
    return session, attribute(measure(session), session)


def any_table(place: Path, opened: tuple[Any, Any], kind: str, content: bytes) -> None:
    """Read a table as what it says it is."""
    session, activity = opened
    file = place / "in" / "table.csv"
    file.write_bytes(content)
    with bounded(place):
        if kind == "automation":
            read_automation(file, session, hops=frames_to_hops(session.frames, session.rate_hz), written=NO_ROWS)
        elif kind == "speech":
            assert is_speech_table(file) in (True, False)
            with_speech_table(session, activity, file)
        else:
            read_corrections(file)
            open_session([place / "in" / "a.wav", place / "in" / "b.wav"], corrections=file)


@fuzz(3 * QUICK)
@given(drawn=tables())
def test_tables(place: Path, opened: tuple[Any, Any], drawn: tuple[str, bytes]) -> None:
    """Any cells in automation, speech and corrections: read, or an error of our own."""
    any_table(place, opened, *drawn)


@fuzz(QUICK)
@given(kind=st.sampled_from(list(COLUMNS)), content=st.binary(max_size=200))
def test_tables_of_noise(place: Path, opened: tuple[Any, Any], kind: str, content: bytes) -> None:
    """Any bytes: read, or an error of our own."""
    any_table(place, opened, kind, content)


@pytest.mark.long
@fuzz(2 * LONG)
@given(drawn=tables())
def test_many_tables(place: Path, opened: tuple[Any, Any], drawn: tuple[str, bytes]) -> None:
    """The same, many times."""
    any_table(place, opened, *drawn)


NAMES = st.lists(st.one_of(st.text(st.characters(codec="utf-8"), min_size=1, max_size=12), st.sampled_from(
    ["=1+1", "'=1+1", "''=1+1", "+a", " =a", "@a", "-a", "\uff1da", 'a"b', "a,b", "a;b", "Ana", "Ana "])), min_size=1,
    max_size=4)


@fuzz(2 * QUICK)
@given(drawn=NAMES)
def test_names_are_harmless_and_come_back(drawn: list[str], tmp_path_factory: pytest.TempPathFactory) -> None:
    """A name that would run is quoted in its cell, and each of several names is found again, not another."""
    names = unique_names([safe_name(name) for name in drawn])
    file = tmp_path_factory.getbasetemp() / "names.csv"
    file.write_text("track\r\n" + "".join(f"{text_cell(name)}\r\n" for name in names), encoding="utf-8", newline="")
    with open(file, encoding="utf-8", newline="") as table_file:
        raw = [row[0] for row in csv.reader(table_file)][1:]
    assert [cell for cell in raw if cell.lstrip(" ").startswith(("=", "+", "-", "@", "\uff1d", "\t", "\r"))] == []
    assert raw == [harmless(name) for name in names]
    session = _Named(names)
    found = [track_index(cells[0], session, "") for _, cells in read_rows(file, ("track",))]  # type: ignore[arg-type]
    assert found == list(range(len(names)))


class _Named:
    """As much of a session as a name needs."""

    def __init__(self, names: list[str]) -> None:
        self.tracks = [type("Track", (), {"name": name}) for name in names]


# Headers

HEADER_BYTES = 44


def any_header(place: Path, content: bytes) -> None:
    """Open a file as a session and read its loudness."""
    file = place / "in" / "h.wav"
    file.write_bytes(content)
    with bounded(place):
        measure_files([file], accept_short=True)
    with bounded(place):
        session = open_session([file], accept_short=True)
        stems_stay_inside(session, place)


@st.composite
def headers(draw: st.DrawFn) -> bytes:
    """A short WAV file whose header has a few bytes or fields changed, or chunks put between."""
    content = bytearray(_wav())
    for _ in range(draw(st.integers(1, 4))):
        at = draw(st.integers(0, HEADER_BYTES - 1))
        content[at] = draw(st.sampled_from([0, 1, 2, 0x7F, 0x80, 0xFF, draw(st.integers(0, 255))]))
    if draw(st.booleans()):
        kind = draw(st.sampled_from([b"bext", b"iXML", b"ds64", b"PEAK", b"LIST", b"cue ", b"fact", b"abcd"]))
        size = draw(st.sampled_from([0, 1, 7, 300, 0x7FFFFFFF, 0xFFFFFFFF]))
        content[12:12] = kind + struct.pack("<I", size) + draw(st.binary(max_size=300))
    if draw(st.booleans()):
        content[:4] = draw(st.sampled_from([b"RF64", b"BW64", b"RIFX", b"FORM", b"fLaC", b"OggS", b"ID3\x04"]))
    return bytes(content[: draw(st.integers(0, len(content)))] if draw(st.integers(0, 4)) == 0 else content)


def _wav() -> bytes:
    """A plain file of 16 bit, 250 ms."""
    data = np.random.default_rng(3).integers(-9000, 9000, RATE_HZ // 4, dtype="<i2").tobytes()
    form = struct.pack("<HHIIHH", 1, 1, RATE_HZ, 2 * RATE_HZ, 2, 16)
    body = b"WAVEfmt " + struct.pack("<I", len(form)) + form + b"data" + struct.pack("<I", len(data)) + data
    return b"RIFF" + struct.pack("<I", len(body)) + body


def test_the_plain_file_is_read(place: Path) -> None:
    """What the headers are made from is a good file."""
    (place / "in" / "plain.wav").write_bytes(_wav())
    assert open_session([place / "in" / "plain.wav"]).frames == RATE_HZ // 4
    (place / "in" / "plain.wav").unlink()


@fuzz(3 * QUICK)
@given(content=headers())
def test_headers(place: Path, content: bytes) -> None:
    """A header that lies: a session or an error of our own, in bounded memory and time."""
    any_header(place, content)


@pytest.mark.long
@fuzz(LONG // 3)
@given(content=headers())
def test_many_headers(place: Path, content: bytes) -> None:
    """The same, many times."""
    any_header(place, content)


def test_a_file_of_empty_chunks_is_not_walked_for_long(place: Path) -> None:
    """A million chunks of nothing before the audio cost no time."""
    content = _wav()
    any_header(place, content[:12] + b"abcd\0\0\0\0" * 1_000_000 + content[12:])


def test_a_long_silence_is_refused_by_the_disk(tmp_path: Path) -> None:
    """A small FLAC that really holds ten minutes is refused, since its stems would not fit, before any work starts."""
    with soundfile.SoundFile(tmp_path / "bomb.flac", "w", 48_000, 1, "PCM_16") as file:
        for _ in range(10):
            file.write(np.zeros(60 * 48_000, np.int16))
    assert (tmp_path / "bomb.flac").stat().st_size < 1 << 20
    folder = tmp_path / "out"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("shutil.disk_usage", lambda _: type("Usage", (), {"free": 10**8}))
        with pytest.raises(OutputError, match=r"GB, but 0\.10 GB are free"):
            process(tmp_path / "bomb.flac", out=folder, on_progress=lambda *_: pytest.fail("work was begun"))
    assert not folder.exists()


# Coverage-guided

FUZZ_S = 300  # a reader, in the long tier
GUIDED = ("session_toml", "season_toml", "season_csv", "automation", "corrections", "speech", "wav", "ixml")


def fuzzed(target: str, seconds: int) -> subprocess.CompletedProcess[str]:
    """A run of `fuzz_long.py`; its folder stays where it found something."""
    done = subprocess.run([sys.executable, Path(__file__).with_name("fuzz_long.py"), target, "--seconds", str(seconds)],
                          capture_output=True, text=True, check=False)
    if not done.returncode:
        shutil.rmtree(done.stdout.strip().rpartition(" ")[2])
    return done


@pytest.mark.long
@pytest.mark.parametrize("target", GUIDED)
def test_guided(target: str) -> None:
    """Five minutes of input that looks for lines not yet reached: nothing but results and errors of our own."""
    done = fuzzed(target, FUZZ_S)
    assert done.returncode == 0, done.stderr[-4000:]
    assert "number_of_executed_units" in done.stderr


@pytest.mark.long
def test_guided_tells_a_fault() -> None:
    """A fault on purpose ends the run."""
    done = fuzzed("found_at_once", FUZZ_S)
    assert done.returncode != 0
    assert "KeyError: 1" in done.stderr + done.stdout
