"""Inputs that are refused, or repaired and said: each prepares the current folder, where `talk/` holds a short session.

The names are those of the tables in docs/errors.md. `talk/` has Ana.wav and Odo.wav, 20 s at 16 kHz and 24 bit. Where a
row needs a system that refuses (a disk without room), the builder patches the one call that asks the system.
"""

from __future__ import annotations

import shutil
import struct
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import soundfile

RATE_HZ = 16_000
LENGTH_S = 20
WEEK_S = 7 * 24 * 3600
TALK = Path("talk")

Builder = Callable[[pytest.MonkeyPatch], None]


def read(name: str = "Ana") -> np.ndarray:
    """A microphone of the session."""
    return soundfile.read(TALK / f"{name}.wav", dtype="float32")[0]


def save(name: str, x: np.ndarray, *, subtype: str = "PCM_24", rate_hz: int = RATE_HZ) -> None:
    """Write a file of the session."""
    soundfile.write(TALK / name, x, rate_hz, subtype)


def toml(*lines: str) -> Builder:
    """A builder that writes a session.toml."""
    return lambda _: write(TALK / "session.toml", "\n".join(lines) + "\n")


def write(path: Path, text: str) -> None:
    """A text file."""
    path.write_text(text, encoding="utf-8")


def cut(path: Path, size: int) -> None:
    """Keep the first bytes of a file."""
    with open(path, "r+b") as file:
        file.truncate(size)


def corrections(text: str) -> Builder:
    """A builder that writes a corrections.csv."""
    return lambda _: write(Path("corrections.csv"), text)


def nothing(_: pytest.MonkeyPatch) -> None:
    """The session as it is."""


# Refused


def zero_bytes(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").write_bytes(b"")


def zero_frames(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", np.zeros(0, np.float32))


def no_audio_in_it(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").write_bytes(b"a letter, not a recording\n" * 9)


def phone_format(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.m4a").write_bytes(b"\0\0\0\x20ftypM4A " + bytes(200))


def locked(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").chmod(0)


def locked_folder(_: pytest.MonkeyPatch) -> None:
    TALK.chmod(0)


def half(_: pytest.MonkeyPatch) -> None:
    cut(TALK / "Ana.wav", (TALK / "Ana.wav").stat().st_size // 2)


def claims_a_week(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").unlink()
    flac_of(TALK / "Ana.flac", WEEK_S * RATE_HZ)


def damaged_block(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").unlink()
    rng = np.random.default_rng(4)
    soundfile.write(TALK / "Ana.flac", rng.normal(0, 0.05, 20 * RATE_HZ), RATE_HZ)
    content = (TALK / "Ana.flac").read_bytes()
    at = len(content) // 2
    (TALK / "Ana.flac").write_bytes(content[:at] + bytes(50) + content[at + 50 :])


def flac_of(path: Path, claimed_frames: int) -> None:
    """A FLAC of 1 s whose header claims so many frames (RFC 9639, 8.2: 36 bits, the last of them in bytes 21 to 25)."""
    soundfile.write(path, np.zeros(RATE_HZ, np.float32), RATE_HZ)
    with open(path, "r+b") as file:
        file.seek(21)
        high = file.read(1)[0] & 0xF0
        file.seek(21)
        file.write(bytes([high | claimed_frames >> 32]) + struct.pack(">I", claimed_frames & 0xFFFFFFFF))


def late_by_a_day(_: pytest.MonkeyPatch) -> None:
    toml("[[track]]", 'file = "Ana.wav"', "[[track]]", 'file = "Odo.wav"', "offset_s = 86400")(_)


def slow_rate(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", read(), rate_hz=4000)


def many_channels(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", np.zeros((100, 200), np.float32))


def folder_without_audio(_: pytest.MonkeyPatch) -> None:
    Path("notes").mkdir()
    write(Path("notes/words.txt"), "no audio")


def out_there(_: pytest.MonkeyPatch) -> None:
    Path("levelled/talk").mkdir(parents=True)


def out_is_a_file(_: pytest.MonkeyPatch) -> None:
    write(Path("done"), "")


def out_is_a_link(_: pytest.MonkeyPatch) -> None:
    Path("elsewhere").mkdir()
    Path("done").symlink_to("elsewhere")


def read_only(_: pytest.MonkeyPatch) -> None:
    Path("locked").mkdir(mode=0o555)


def full_disk(patch: pytest.MonkeyPatch) -> None:
    patch.setattr(shutil, "disk_usage", lambda _: shutil._ntuple_diskusage(10**9, 10**9 - 10**6, 10**6))


def automation(*rows: str) -> Builder:
    """A builder that writes an automation.csv."""
    return lambda _: write(Path("edited.csv"), "\n".join(("time_s,track,gain_db", *rows)) + "\n")


def no_text(_: pytest.MonkeyPatch) -> None:
    (TALK / "session.toml").write_bytes(b'title = "\xff\xfe\xfa"\n')


REFUSED: dict[str, Builder] = {
    "a file that is not there": nothing,
    "a file of zero bytes": zero_bytes,
    "a file of zero length": zero_frames,
    "a file that is no audio": no_audio_in_it,
    "a format that cannot be decoded": phone_format,
    "a file that may not be read": locked,
    "a folder that may not be read": locked_folder,
    "a name that no file can have": nothing,
    "such a name as the second file": nothing,
    "such a name for measure": nothing,
    "such a name for finish": nothing,
    "such a name for batch": nothing,
    "such a name for settings": nothing,
    "a file shorter than its header says": half,
    "a FLAC that claims a week": claims_a_week,
    "a FLAC with a damaged block": damaged_block,
    "a session longer than a day": late_by_a_day,
    "a rate out of range": slow_rate,
    "more than 128 channels": many_channels,
    "a folder without audio": folder_without_audio,
    "a key that is not known": toml('titel = "Talk"'),
    "a key of a track that is not known": toml("[[track]]", 'file = "Ana.wav"', "ofset_s = 1"),
    "a value out of range": toml("target_lufs = -60"),
    "a value of another kind": toml("mix_channels = true"),
    "a number with thousands of digits": toml(f"sample_rate = {'9' * 5000}"),
    "lists within lists, a thousand deep": toml(f"title = {'[' * 1000}"),
    "a session.toml that is no text": no_text,
    "a session.toml with an open quote": toml('title = "Talk'),
    "a file that session.toml names wrongly": toml("[[track]]", 'file = "Anna.wav"'),
    "a name that leaves the output folder": toml("[[track]]", 'file = "Ana.wav"', 'name = "../Ana"'),
    "a name that is a device": toml("[[track]]", 'file = "Ana.wav"', 'name = "NUL"'),
    "a name of 300 characters": toml("[[track]]", 'file = "Ana.wav"', f'name = "{"a" * 300}"'),
    "a name with a control character": toml("[[track]]", 'file = "Ana.wav"', r'name = "A\u0007na"'),
    "a setting that is not known": nothing,
    "a setting out of range": nothing,
    "a delivery that is not known": nothing,
    "a folder that exists": out_there,
    "a file where the folder shall be": out_is_a_file,
    "a link where the folder shall be": out_is_a_link,
    "the folder with the sources": nothing,
    "a read-only place": read_only,
    "no room on the disk": full_disk,
    "corrections of an unknown track": corrections("track,from_s,to_s,decide\nAnna,1,2,own\n"),
    "corrections that end before they begin": corrections("track,from_s,to_s,decide\nAna,2,1,own\n"),
    "corrections with a cell without end": corrections(f'track,from_s,to_s,decide\n"{"a" * 200_000}",1,2,own\n'),
    "corrections of a timeline that is not known": corrections("track,from_s,to_s,decide,timeline\nAna,1,2,own,mine\n"),
    "corrections of a run with `--align`, without it": corrections(
        "track,from_s,to_s,decide,timeline\nAna,1,2,own,aligned+5.0000\n"),
    "automation with a gain out of range": automation("0,Ana,0", "0,Odo,0", "20,Ana,80", "20,Odo,0"),
    "automation with a gain that is no number": automation("0,Ana,0", "0,Odo,1e999", "20,Ana,0", "20,Odo,0"),
    "automation without a row at the end": automation("0,Ana,0", "0,Odo,0", "3,Ana,0", "20,Odo,0"),
    "a cut with more than two channels": lambda _: save("Ana.wav", np.zeros((RATE_HZ, 3), np.float32)),
    "a cut named twice": nothing,
    "a wrong command line": nothing,
}


# Accepted, repaired and said


def broken_samples(_: pytest.MonkeyPatch) -> None:
    x = read()
    x[1000:1003] = (np.nan, np.inf, -np.inf)
    save("Ana.wav", x, subtype="FLOAT")


def silent_track(_: pytest.MonkeyPatch) -> None:
    save("Eva.wav", np.zeros_like(read()))


def no_voice(_: pytest.MonkeyPatch) -> None:
    for seed, name in enumerate(("Ana.wav", "Odo.wav")):
        save(name, (1e-3 * np.random.default_rng(seed).standard_normal(LENGTH_S * RATE_HZ)).astype(np.float32))


def near_silent(_: pytest.MonkeyPatch) -> None:
    for seed, name in enumerate(("Ana.wav", "Odo.wav")):
        save(name, (1e-6 * np.random.default_rng(seed).standard_normal(LENGTH_S * RATE_HZ)).astype(np.float32))


def single(_: pytest.MonkeyPatch) -> None:
    (TALK / "Odo.wav").unlink()


def nobody_there(_: pytest.MonkeyPatch) -> None:
    noise = 3e-5 * np.random.default_rng(7).standard_normal(len(read()))
    save("Spare.wav", (0.02 * (read() + read("Odo")) + noise).astype(np.float32))


def clipped(_: pytest.MonkeyPatch) -> None:
    x = read()
    save("Ana.wav", np.clip(4 * x / np.abs(x).max(), -1, 1))


def over_full_scale(_: pytest.MonkeyPatch) -> None:
    x = read()
    save("Ana.wav", 2 * x / np.abs(x).max(), subtype="FLOAT")


def offset(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", read() + np.float32(0.1))


def turned(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", -read())


def other_rate(_: pytest.MonkeyPatch) -> None:
    from scipy.signal import resample_poly

    save("Ana.wav", resample_poly(read(), 3, 1).astype(np.float32), rate_hz=3 * RATE_HZ)
    save("Eva.wav", 0.3 * read("Odo")[::-1])


def other_length(_: pytest.MonkeyPatch) -> None:
    save("Ana.wav", read()[: 5 * RATE_HZ])


def many(_: pytest.MonkeyPatch) -> None:
    noise, few = np.random.default_rng(3), slice(3 * RATE_HZ)
    save("Ana.wav", read()[few])
    save("Odo.wav", read("Odo")[few])
    for n in range(1, 63):
        save(f"{n:02d}.wav", (1e-4 * noise.standard_normal(3 * RATE_HZ)).astype(np.float32))


def odd_names(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").rename(TALK / "Ana \"the voice\" O'Néill.wav")
    (TALK / "Odo.wav").rename(TALK / "Одо 静か.wav")


def formula_name(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").rename(TALK / "=1+1.wav")


def markup_name(_: pytest.MonkeyPatch) -> None:
    (TALK / "Ana.wav").rename(TALK / "<img src=x onerror=alert(1)>.wav")


def equal_names(_: pytest.MonkeyPatch) -> None:
    save("ana.flac", 0.3 * read()[::-1], subtype="PCM_16")


def safety_copy(_: pytest.MonkeyPatch) -> None:
    save("Ana safety.wav", 0.25 * read())


ACCEPTED: dict[str, Builder] = {
    "a file shorter than its header says, with `--accept-short`": half,
    "a FLAC with a damaged block, with `--accept-short`": damaged_block,
    "NaN and Inf": broken_samples,
    "a silent track": silent_track,
    "no voice found at all": no_voice,
    "near-silent input": near_silent,
    "a single track": single,
    "a track nobody speaks into": nobody_there,
    "clipping": clipped,
    "float samples over full scale": over_full_scale,
    "DC": offset,
    "wrong polarity": turned,
    "rates that differ": other_rate,
    "lengths that differ": other_length,
    "64 tracks": many,
    "names with spaces, quotes and other scripts": odd_names,
    "a name that a spreadsheet would run": formula_name,
    "a name that a browser would run": markup_name,
    "equal names": equal_names,
    "a softer copy of a track": safety_copy,
    "a folder that exists, with `--replace`": out_there,
}
