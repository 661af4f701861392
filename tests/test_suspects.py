"""leveller.suspects: who is upside down is told from the arrivals alone, and nobody where all agree."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

import pytest
from recorders import TALK, alone, opened, talk, written

from leveller import cli
from leveller.suspects import alignment_notes

UPSIDE_DOWN = ("second: upside down, so their sum partly cancels. --align corrects it, or polarity = -1 for it in "
               "session.toml")


@pytest.mark.parametrize("people", [2, 3])
def test_process_warns_of_a_microphone_upside_down(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], people: int
) -> None:
    """Without --align one line names the track that is upside down and the ways out; either way out leaves none."""
    mics = talk(dataclasses.replace(TALK, people=people)).copy()
    mics[:, 1] *= -1
    folder = written(tmp_path / "in", *mics.T)
    assert _said(capsys, "process", folder, "--out", tmp_path / "one") == [UPSIDE_DOWN]
    assert _said(capsys, "process", folder, "--out", tmp_path / "two", "--align") == ["second: upside down, put right"]
    tables = [f'[[track]]\nfile = "{path.name}"\n' for path in sorted(folder.glob("*.wav"))]
    tables[1] += "polarity = -1\n"
    (folder / "session.toml").write_text("".join(tables), encoding="utf-8")
    assert _said(capsys, "process", folder, "--out", tmp_path / "three") == []
    assert (tmp_path / "two" / "mix.wav").read_bytes() == (tmp_path / "three" / "mix.wav").read_bytes()


def _said(capsys: pytest.CaptureFixture[str], *words: object) -> list[str]:
    """What a command says of tracks upside down, without the figures."""
    capsys.readouterr()
    with pytest.raises(SystemExit) as left:
        cli.main([str(word) for word in words])
    assert left.value.code == 0
    lines = [line.strip() for line in capsys.readouterr().out.splitlines() if "upside down" in line]
    return [re.sub(r" against (first|third)| \((correlation|confidence) -?0\.\d\d\)", "", line) for line in lines]


@pytest.mark.parametrize("down", [(), (0,), (1,), (2,), (1, 2)])
def test_the_fewer_tracks_are_upside_down(tmp_path: Path, down: tuple[int, ...]) -> None:
    """Of three tracks the odd one is named, and nobody where all agree."""
    mics = talk(dataclasses.replace(TALK, people=3)).copy()
    mics[:, list(down)] *= -1
    session, m = opened(written(tmp_path, *mics.T))
    odd = {(): set(), (1, 2): {"first"}}.get(down, {("first", "second", "third")[i] for i in down})
    assert {note.split(":")[0] for note in alignment_notes(session, m)} == odd


def test_tracks_without_common_sound_have_no_polarity(tmp_path: Path) -> None:
    """Chance stays far under the height that counts."""
    _, m = opened(written(tmp_path, alone(31, "woman_en"), alone(51, "man_commands")))
    assert m.arrivals.signed.tolist() == [0.0]
