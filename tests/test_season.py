"""leveller.season and leveller.defaults: what a season is, and what a show says for all its sessions."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf

from leveller.errors import AutomationError, InputError, LevellerError, SettingsError
from leveller.fingerprint import fingerprint
from leveller.report.origins import delivery_in_force, settings_in_force
from leveller.season import read_season, told_from
from leveller.session import open_session


def sound(path: Path, channels: int = 1) -> Path:
    """A short file."""
    path.parent.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng([channels, len(path.name)])
    sf.write(path, 0.1 * rng.standard_normal((1600, channels)), 16_000, subtype="PCM_16")
    return path


def names(path: Path) -> list[str]:
    """The episodes' names in order."""
    return [episode.name for episode in read_season(path).episodes]


def test_a_folder_lists_its_sessions_in_natural_order(tmp_path: Path) -> None:
    """Session folders and polyphonic files count; hidden ones, other folders and our own output do not."""
    for name in ("ep 10/a.wav", "ep 2/a.wav", ".old/a.wav", "out/mix.wav"):
        sound(tmp_path / name)
    sound(tmp_path / "ep 3.wav", 2)
    sound(tmp_path / "ep 2.wav", 2)
    (tmp_path / "ep 4").mkdir()
    (tmp_path / "ep 4" / "session.toml").write_text("")
    (tmp_path / "notes").mkdir()
    for name in ("report.json", "automation.csv"):
        (tmp_path / "out" / name).write_text("{}")
    assert names(tmp_path) == ["ep 2", "ep 2 2", "ep 3", "ep 4", "ep 10"]
    assert read_season(tmp_path).notes == (
        "notes: no audio directly in it, left out", "out: written by leveller, left out")
    assert read_season(tmp_path).title == tmp_path.name
    (tmp_path / "season.toml").write_text('title = "The Harbour"\n')
    assert read_season(tmp_path).title == "The Harbour"


def test_a_session_is_no_season(tmp_path: Path) -> None:
    """A folder that is one session is refused, with the way out."""
    for name in ("host", "guest"):
        sound(tmp_path / f"{name}.wav")
    with pytest.raises(InputError, match=r"2 files of one channel each, so it is one session\. Use leveller process"):
        read_season(tmp_path)
    (tmp_path / "session.toml").write_text("")
    with pytest.raises(InputError, match=r"holds a session\.toml, so it is one session"):
        read_season(tmp_path)
    (tmp_path / "empty").mkdir()
    with pytest.raises(InputError, match="no folder with audio in it, and no audio file"):
        read_season(tmp_path / "empty")
    with pytest.raises(InputError, match="no such file or folder"):
        read_season(tmp_path / "none")
    with pytest.raises(InputError, match=r"expected a folder of sessions, or a list of them as \.csv or \.toml"):
        read_season(sound(tmp_path / "host.wav"))


@pytest.mark.parametrize(("text", "message", "kind"), [
    ("sesion\nep 1\n", "list.csv, line 1: column 'session' is missing (did you mean \"sesion\"?)", AutomationError),
    ("session,delivry\nep 1,r128\n", "list.csv, line 2: unknown key 'delivry' (did you mean \"delivery\"?)",
     SettingsError),
    ("session,name\nep 1,../x\n", "name = '../x' holds a path separator", SettingsError),
    ("session,name\nep 1,x\nep 2,x\n", "the name 'x' stands there twice", SettingsError),
    ("session,name\n,x\n", "list.csv, line 2: needs session, a path or a list of paths, found None", SettingsError),
    ("session,align\nep 1,2\n", "align = '2': expected yes or no", SettingsError),
    ("session,accept_short\nep 1,maybe\n", "accept_short = 'maybe': expected yes or no", SettingsError),
    ("session\n", "lists no episodes", InputError),
])
def test_a_list_that_is_not_understood_is_refused(
    tmp_path: Path, text: str, message: str, kind: type[LevellerError]
) -> None:
    """One line says which file and row, and what was expected."""
    (tmp_path / "list.csv").write_text(text)
    with pytest.raises(kind, match=re.escape(message)):
        read_season(tmp_path / "list.csv")


def test_a_list_counts_from_where_it_lies(tmp_path: Path) -> None:
    """Paths are relative to the list; an episode is named after its folder or file; a list may be elsewhere."""
    (tmp_path / "lists").mkdir()
    file = tmp_path / "lists" / "spring.toml"
    file.write_text('title = "Spring"\n[[episode]]\nsession = "../ep 1"\n'
                    '[[episode]]\nsession = "../ep 2/session.toml"\n'
                    '[[episode]]\nsession = "../ep 3.wav"\naccept_short = true\n'
                    'align = true\n[episode.ride]\nenabled = false\n')
    season = read_season(file)
    assert season.title == "Spring"
    assert [episode.name for episode in season.episodes] == ["ep 1", "ep 2", "ep 3"]
    assert season.episodes[0].sources == (str(tmp_path / "ep 1"),)
    assert {episode.season for episode in season.episodes} == {str(file)}
    assert season.episodes[2].settings == (("ride.enabled", False),)
    assert season.episodes[2].accept_short
    assert [episode.align for episode in season.episodes] == [None, None, True]
    file.write_text('[[episode]]\nsession = 3\n')
    with pytest.raises(SettingsError, match=r"spring\.toml: \[\[episode\]\] 1: needs session"):
        read_season(file)
    file.write_text("title = 'x'\n")
    with pytest.raises(SettingsError, match=r"spring\.toml: names no episodes"):
        read_season(file)


@pytest.mark.parametrize(("show", "own", "option", "lined_up"), [
    ("", "", None, False), ("align = true", "", None, True), ("align = true", "align = false", None, False),
    ("", "align = true", None, True), ("align = true", "", False, False), ("align = false", "", True, True),
])
def test_a_show_says_whether_tracks_are_lined_up(
    tmp_path: Path, show: str, own: str, option: bool | None, lined_up: bool
) -> None:
    """season.toml, over it session.toml, over it the option; and the fingerprint knows what it came to."""
    sound(tmp_path / "ep 1" / "a.wav")
    (tmp_path / "season.toml").write_text(show)
    (tmp_path / "ep 1" / "session.toml").write_text(own)
    assert open_session([tmp_path / "ep 1"], align=option).align is lined_up
    assert fingerprint([tmp_path / "ep 1"], align=option) == fingerprint([tmp_path / "ep 1"], align=lined_up)
    assert fingerprint([tmp_path / "ep 1"], align=option) != fingerprint([tmp_path / "ep 1"], align=not lined_up)
    (tmp_path / "season.toml").write_text("align = 1\n")
    with pytest.raises(SettingsError, match=r"season\.toml: align = 1: expected true or false"):
        open_session([tmp_path / "ep 1"])


def test_a_session_overrides_its_season(tmp_path: Path) -> None:
    """Default, season.toml, session.toml, --set: each is stronger than the one before, and named as the origin."""
    sound(tmp_path / "ep 1" / "a.wav")
    (tmp_path / "season.toml").write_text(
        'title = "x"\ntarget_lufs = -20\nmix_channels = 2\n[expander]\nrange_db = 12\nratio = 3\nhold_s = 0.5\n')
    (tmp_path / "ep 1" / "session.toml").write_text("ceiling_dbtp = -2\n[expander]\nratio = 4\n")
    session = open_session([tmp_path / "ep 1"], assignments={"expander.hold_s": 0.3})
    expander = session.settings.expander
    assert (expander.range_db, expander.ratio, expander.hold_s) == (12, 4, 0.3)
    assert (session.delivery.target_lufs, session.delivery.ceiling_dbtp, session.mix_channels) == (-20, -2, 2)
    assert session == open_session([tmp_path / "ep 1" / "session.toml"], assignments={"expander.hold_s": 0.3})
    rows = {row[0]: (row[1], row[3]) for row in settings_in_force(tmp_path / "ep 1", {"expander.hold_s": 0.3})}
    assert rows["expander.range_db"] == ("12", "season.toml")
    assert rows["expander.ratio"] == ("4", "session.toml")
    assert rows["expander.hold_s"] == ("0.3", "--set")
    assert rows["expander.knee_db"] == ("4", "default")
    assert delivery_in_force(tmp_path / "ep 1") == (
        "podcast-mono (default), -20.0 LUFS (season.toml), -2.0 dBTP (session.toml), 2 channels (season.toml)")


@pytest.mark.parametrize(("show", "own", "option", "value", "origin"), [
    ("", "", None, "false", "default"), ("align = true\n", "", None, "true", "season.toml"),
    ("align = true\n", "align = false\n", None, "false", "session.toml"),
    ("", "align = true\n", None, "true", "session.toml"), ("align = true\n", "", False, "false", "--no-align"),
    ("", "align = false\n", True, "true", "--align")])
def test_align_is_listed_among_the_settings(
    tmp_path: Path, show: str, own: str, option: bool | None, value: str, origin: str
) -> None:
    """`align` is listed with its value, as a session opened likewise takes it, and with what said so."""
    sound(tmp_path / "ep 1" / "a.wav")
    (tmp_path / "season.toml").write_text(show)
    (tmp_path / "ep 1" / "session.toml").write_text(own)
    key, shown, unit, where, _ = settings_in_force(tmp_path / "ep 1", {}, align=option)[0]
    assert (key, shown, unit, where) == ("align", value, "on/off", origin)
    assert open_session([tmp_path / "ep 1"], align=option).align is (value == "true")


def test_a_delivery_of_the_session_drops_that_of_the_season(tmp_path: Path) -> None:
    """Where session.toml names a delivery, neither delivery, target nor ceiling of season.toml counts."""
    sound(tmp_path / "ep 1" / "a.wav")
    (tmp_path / "season.toml").write_text('delivery = "a85"\ntarget_lufs = -20\nceiling_dbtp = -3\n')
    assert open_session([tmp_path / "ep 1"]).delivery.target_lufs == -20
    assert open_session([tmp_path / "ep 1"]).delivery.source == "season.toml"
    (tmp_path / "ep 1" / "session.toml").write_text('delivery = "r128"\n')
    delivery = open_session([tmp_path / "ep 1"]).delivery
    assert (delivery.name, delivery.target_lufs, delivery.ceiling_dbtp) == ("r128", -23, -1)


def test_a_polyphonic_file_finds_its_season(tmp_path: Path) -> None:
    """A file looks for season.toml beside itself, then above; a folder above itself only."""
    file = sound(tmp_path / "show" / "ep 1.wav", 2)
    (tmp_path / "season.toml").write_text('delivery = "a85"\n')
    assert open_session([file]).delivery.name == "a85"
    (tmp_path / "show" / "season.toml").write_text('delivery = "r128"\n')
    assert open_session([file]).delivery.name == "r128"
    assert open_session([tmp_path / "show"]).delivery.name == "a85"


@pytest.mark.parametrize(("text", "message"), [
    ('delivery = "r129"', "season.toml: unknown delivery 'r129' (did you mean \"r128\"?)"),
    ("[expander]\nrang_db = 3", "season.toml: unknown setting 'expander.rang_db'"),
    ("[[track]]\nfile = 'a.wav'", "season.toml: unknown key 'track'"),
    ("target_lufs = 3", "season.toml: target_lufs = 3: expected a number from -40 to -5 (LUFS)"),
    ("what", "season.toml: not valid TOML"),
])
def test_a_bad_season_file_is_named(tmp_path: Path, text: str, message: str) -> None:
    """A fault of season.toml is told as such, whichever session it is found with."""
    sound(tmp_path / "ep 1" / "a.wav")
    (tmp_path / "season.toml").write_text(text)
    with pytest.raises(SettingsError, match=re.escape(message)):
        open_session([tmp_path / "ep 1"])
    with pytest.raises(SettingsError, match=re.escape(message)):
        read_season(tmp_path)


def test_lists_nested_too_deep_are_refused(tmp_path: Path) -> None:
    """A season.toml of brackets alone is one line of error."""
    (tmp_path / "season.toml").write_text("a = " + "[" * 100_000)
    with pytest.raises(SettingsError, match=r"season\.toml: a number has thousands of digits, or lists lie too deep"):
        read_season(tmp_path)


def test_reasons_are_told_from_a_folder() -> None:
    """Paths below the folder and those that are named lose what lies before it; the root and other words stay."""
    text = "/a/show/ep 1/x.wav and /a/show/ep 10/y.wav, /b/z.wav: see /a/show or /etc/x"
    assert told_from(Path("/a/show"), text, ["/a/show/ep 1", "/b/z.wav"]) == (
        "ep 1/x.wav and ep 10/y.wav, ../../b/z.wav: see show or /etc/x")
    assert told_from(Path("/"), "/x/y.wav: missing", []) == "/x/y.wav: missing"
