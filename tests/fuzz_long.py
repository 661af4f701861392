"""Coverage-guided fuzzing of everything that reads what others wrote, for as long as one likes.

    pip install --editable '.[test,fuzz]'
    python tests/fuzz_long.py TARGET [--seconds N] [--corpus FOLDER]

Any bytes must end in a result or in an error of leveller's own, within `SLOWEST_S` and `MOST_MB`. Everything else -
another exception, an endless loop, memory that grows - ends the run with a traceback and an exit code other than 0,
and the bytes that did it lie in the folder that is named. What reached new lines is kept in the corpus, if one is
named, where the next run begins. `tests/test_hostile.py` does the same without guidance in the ordinary run.

Guidance: atheris (libFuzzer) on the lines of leveller and tomllib. libsndfile itself is not instrumented.
"""

from __future__ import annotations

import argparse
import contextlib
import csv
import io
import struct
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import atheris

with atheris.instrument_imports(include=["leveller", "tomllib"]):
    from leveller import audio, riff
    from leveller.automation import COLUMNS, NO_ROWS, read_automation
    from leveller.bwf import bext_chunk, cue_chunks, read_bext
    from leveller.defaults import SEASON_KEYS
    from leveller.edits import SPEECH_COLUMNS, is_speech_table, with_speech_table
    from leveller.errors import LevellerError
    from leveller.ixml import parse_track_list, read_track_list
    from leveller.reading import measure_files
    from leveller.season import EPISODE_KEYS, read_season
    from leveller.session import open_session
    from leveller.sessionfile import (
        CORRECTION_KEYS,
        SESSION_KEYS,
        SKIP_KEYS,
        TRACK_KEYS,
        read_corrections,
        read_session_file,
    )
    from leveller.units import frames_to_hops

import numpy as np
import soundfile

from leveller.attribute import attribute
from leveller.measure import measure

SLOWEST_S = 10  # of the processor for one input; own choice, one takes milliseconds
ENDLESS_S = 300  # by the clock, which also runs while the machine does something else
MOST_MB = 1500  # of the whole process; own choice, it begins with 300 and the corpus stays in memory
LONGEST_BYTES = 4096  # of an input
RATE_HZ = 8000
MEMORY = Path("/dev/shm")  # where a busy disk is not taken for a hang

Target = Callable[[Path, bytes], object]


def session_toml(place: Path, content: bytes) -> object:
    """session.toml, its keys and the files it names."""
    file = place / "session.toml"
    file.write_bytes(content)
    with contextlib.suppress(LevellerError):
        read_session_file(file)
    return open_session([file])


def season_toml(place: Path, content: bytes) -> object:
    """season.toml with its list of episodes and its defaults."""
    (place / "list.toml").write_bytes(content)
    return read_season(place / "list.toml")


def season_csv(place: Path, content: bytes) -> object:
    """The list of episodes as a table."""
    (place / "list.csv").write_bytes(content)
    return read_season(place / "list.csv")


def automation(place: Path, content: bytes) -> object:
    """automation.csv."""
    session, _ = opened(place)
    (place / "table.csv").write_bytes(content)
    return read_automation(place / "table.csv", session, hops=frames_to_hops(session.frames, session.rate_hz),
                           written=NO_ROWS)


def corrections(place: Path, content: bytes) -> object:
    """corrections.csv, read and applied to the session's tracks."""
    (place / "table.csv").write_bytes(content)
    read_corrections(place / "table.csv")
    return open_session([place / "a.wav", place / "b.wav"], corrections=place / "table.csv")


def speech(place: Path, content: bytes) -> object:
    """speech.csv, edited by hand."""
    (place / "table.csv").write_bytes(content)
    is_speech_table(place / "table.csv")
    return with_speech_table(*opened(place), place / "table.csv")


def wav(place: Path, content: bytes) -> object:
    """The header of an audio file: its chunks, sizes, texts and names, and what of it can be read."""
    file = place / "x" / "h.wav"
    file.write_bytes(content)
    for read in (riff.read_chunks, riff.missing_bytes, read_bext, read_track_list):
        with contextlib.suppress(LevellerError):
            read(file)
    with contextlib.suppress(LevellerError):
        audio.append_chunks(file, [(b"bext", bext_chunk(description="x", time_reference=1))])
    file.write_bytes(content)
    with contextlib.suppress(LevellerError):
        measure_files([file], accept_short=True)
    return open_session([file], accept_short=True)


def ixml(_: Path, content: bytes) -> object:
    """The document in an iXML chunk."""
    return parse_track_list(content).names(8)


def found_at_once(_: Path, content: bytes) -> object:
    """A fault on purpose: shows that the fuzzer tells one."""
    return {0: 0}[len(content[:1])]


TARGETS: dict[str, Target] = {target.__name__: target for target in (
    session_toml, season_toml, season_csv, automation, corrections, speech, wav, ixml, found_at_once)}
_opened: list[tuple[object, object]] = []


def opened(place: Path) -> tuple:
    """The session of a.wav and b.wav, attributed; made once."""
    if not _opened:
        session = open_session([place / "a.wav", place / "b.wav"])
        _opened.append((session, attribute(measure(session), session)))
    return _opened[0]


def table(columns: tuple[str, ...], *rows: tuple[object, ...]) -> bytes:
    """A table as leveller writes it."""
    text = io.StringIO()
    csv.writer(text).writerows([columns, *rows])
    return text.getvalue().encode()


def seeds(place: Path) -> dict[str, list[bytes]]:
    """Good inputs to begin with."""
    document = (b"<BWFXML><TRACK_LIST><TRACK><CHANNEL_INDEX>1</CHANNEL_INDEX><INTERLEAVE_INDEX>1</INTERLEAVE_INDEX>"
                b"<NAME>Ana</NAME></TRACK></TRACK_LIST></BWFXML>")
    toml = (b'title = "t"\ntarget_lufs = -19\n[[track]]\nfile = "a.wav"\noffset_s = 0.5\npan = -1\n[[track]]\n'
            b'file = "b.wav"\nrole = "bed"\n[[skip]]\nfrom_s = 0\nto_s = 0.1\nwhy = "x"\n[[correction]]\ntrack = "a"\n'
            b'from_s = 0.1\nto_s = 0.2\ndecide = "own"\n[expander]\nrange_db = "auto"\n')
    return {
        "session_toml": [toml, b"[[track]]\nfile='a.wav'\nchannels='split'\n"],
        "season_toml": [b'title = "s"\ndelivery = "r128"\n[[episode]]\nsession = "a.wav"\nname = "one"\n'
                        b'[ride]\nenabled = false\n'],
        "season_csv": [table(("session", "name", "delivery"), ("a.wav", "one", "r128"), ("b.wav", "", ""))],
        "automation": [table(("time_s", "track", "gain_db", "auto_trim_db", "expander_db", "ride_db", "compressor_db"),
                             (0, "a", 0, 0, 0, 0, 0), (0, "b", -1, 0, -1, 0, 0), (0.5, "a", -6, 0, -6, 0, 0),
                             (1, "a", 0, 0, 0, 0, 0), (1, "b", 0, 0, 0, 0, 0)),
                       table(("time_s", "track", "gain_db"), (0, "a", 0), (0, "b", 0), (1, "a", 1), (1, "b", 1))],
        "corrections": [table(CORRECTION_KEYS[:4], ("a", 0.1, 0.2, "own"), ("b", 0.5, 1, "bleed"))],
        "speech": [table(SPEECH_COLUMNS, *((0.1, 0.2, "a", "own") + ("1",) * (len(SPEECH_COLUMNS) - 4),))],
        "wav": headers(place, document),
        "ixml": [document],
        "found_at_once": [b"x"]}


def headers(place: Path, document: bytes) -> list[bytes]:
    """Short files of several kinds, and one with everything appended."""
    kinds = (("WAV", "PCM_16"), ("WAV", "FLOAT"), ("RF64", "PCM_24"), ("AIFF", "PCM_16"), ("FLAC", "PCM_16"))
    out = []
    for form, subtype in kinds:
        soundfile.write(place / "seed", np.zeros((100, 2)), RATE_HZ, subtype, format=form)
        out.append((place / "seed").read_bytes())
    (place / "seed").write_bytes(out[0])
    riff.append_chunks(place / "seed", [(b"bext", bext_chunk(description="x", time_reference=5)), (b"iXML", document),
                                        *cue_chunks([(1, 2, "here")])])
    out.append((place / "seed").read_bytes())
    form = struct.pack("<HHIIHH", 1, 1, RATE_HZ, 2 * RATE_HZ, 2, 16)
    stream = b"RIFF\xff\xff\xff\xffWAVEfmt " + struct.pack("<I", len(form)) + form + b"data\xff\xff\xff\xff"
    return [*out, stream + bytes(200)]


def words() -> str:
    """What the readers look for, as libFuzzer's dictionary has it."""
    keys = {*SESSION_KEYS, *TRACK_KEYS, *SKIP_KEYS, *CORRECTION_KEYS, *SEASON_KEYS, *EPISODE_KEYS, *SPEECH_COLUMNS,
            *COLUMNS}
    chunks = ("RIFF", "RF64", "BW64", "WAVE", "FORM", "AIFF", "fLaC", "fmt ", "data", "ds64", "bext", "iXML", "cue ")
    marks = ("[[track]]", "[[skip]]", "[[correction]]", "[[episode]]", "a.wav", "b.wav", "own", "bleed", "<!DOCTYPE")
    return "".join(f'"{word}"\n' for word in (*sorted(keys), *chunks, *marks))


def main() -> None:
    """Fuzz one target."""
    asked = argparse.ArgumentParser(description="Fuzz one reader.")
    asked.add_argument("target", choices=list(TARGETS))
    asked.add_argument("--seconds", type=int, default=60)
    asked.add_argument("--corpus", type=Path)
    options = asked.parse_args()
    place = Path(tempfile.mkdtemp(prefix="fuzz-", dir=MEMORY if MEMORY.is_dir() else None))
    (place / "x").mkdir()
    begin = options.corpus or place / "corpus"
    begin.mkdir(parents=True, exist_ok=True)
    for number, name in enumerate("ab"):
        noise = np.random.default_rng(number).standard_normal(RATE_HZ).astype(np.float32) / 10
        soundfile.write(place / f"{name}.wav", noise, RATE_HZ)
    target = TARGETS[options.target]
    for number, content in enumerate(seeds(place)[options.target]):
        (begin / f"seed {number}").write_bytes(content)
        if options.target != found_at_once.__name__:
            target(place, content)  # a good input that is refused ends the run
    (place / "words").write_text(words())

    def once(content: bytes) -> None:
        begun = time.process_time()
        with contextlib.suppress(LevellerError):
            target(place, content)
        if time.process_time() - begun > SLOWEST_S:
            raise TimeoutError(f"{time.process_time() - begun:.1f} s for one input")

    print(f"{options.target}: {options.seconds} s; what fails is kept in {place}", flush=True)
    atheris.Setup([sys.argv[0], str(begin), f"-max_total_time={options.seconds}", f"-timeout={ENDLESS_S}",
                   f"-rss_limit_mb={MOST_MB}", f"-max_len={LONGEST_BYTES}", f"-artifact_prefix={place}/",
                   f"-dict={place / 'words'}", "-print_final_stats=1", "-verbosity=1"], once)
    atheris.Fuzz()


if __name__ == "__main__":
    main()
