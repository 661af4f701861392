"""leveller.cli: each command does its job, an error is one line and an exit code, nothing is half-written."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import runs
import soundfile

import leveller
from leveller import cli

DEMO = Path(__file__).parents[1] / "demo_session"
HELP_CPU_S = 0.3  # what we promise: over the bare interpreter


@pytest.fixture(scope="module")
def talk(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a short conversation; one name is markup."""
    folder = tmp_path_factory.mktemp("cli") / "talk"
    runs.written(folder, names=("[red]Ana", "Odo"))
    return folder


def run(*words: object) -> int:
    """The exit code of a command line, run in this process."""
    with pytest.raises(SystemExit) as left:
        cli.main([str(word) for word in words])
    return left.value.code if isinstance(left.value.code, int) else 1


def command(*words: object, **options: object) -> subprocess.CompletedProcess[str]:
    """A command line in a process of its own, its output in pipes."""
    return subprocess.run([sys.executable, "-m", "leveller", *map(str, words)], capture_output=True, text=True,
                          check=False, timeout=120, **options)


# Doing the job


def test_process_writes_and_sums_up(talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`process` writes all files with the options given, and says so in plain text."""
    out = tmp_path / "deep" / "out"
    code = run("process", talk, "--out", out, "--delivery", "r128", "--stems", "limited",
               "--set", "expander.range_db=12")
    said = capsys.readouterr()
    assert code == 0
    assert said.err == ""
    assert said.out.startswith("Delivery met: -23.0")
    assert said.out.endswith(f"Written to {out}\n")
    assert "\n[red]Ana " in said.out
    assert "\x1b" not in said.out
    assert {path.name for path in out.iterdir()} >= {
        "mix.wav", "stems", "automation.csv", "mix.csv", "speech.csv", "report.json"}
    assert soundfile.info(out / "mix.wav").channels == 2
    assert soundfile.info(out / "stems" / "[red]Ana.wav").subtype == "PCM_24"
    report = json.loads((out / "report.json").read_text(encoding="utf-8"))
    assert (report["delivery"]["name"], report["settings"]["expander.range_db"]) == ("r128", 12.0)


def test_quiet_says_nothing(talk: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """With --quiet a run that went well prints nothing; --replace replaces."""
    (tmp_path / "out").mkdir()
    assert run("process", talk, "--out", tmp_path / "out", "--quiet", "--replace") == 0
    assert capsys.readouterr() == ("", "")


def test_quiet_still_says_what_was_not_met(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """With --quiet a delivery that is not met is one line on the standard error."""
    silent = runs.save(tmp_path / "A.wav", np.zeros(3 * runs.RATE_HZ, np.float32))
    assert run("process", silent, "--out", tmp_path / "out", "--quiet") == 0
    assert capsys.readouterr() == (
        "", "leveller: delivery not met: no sound over the -70 LUFS gate: -19 LUFS is more than 40 dB away\n")


def test_default_folder_is_named_after_the_title(talk: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch,
                                                 capsys: pytest.CaptureFixture[str]) -> None:
    """Without --out the folder is ./levelled/TITLE, and it is named as seen from here."""
    monkeypatch.chdir(tmp_path)
    assert run("process", talk) == 0
    assert (tmp_path / "levelled" / "talk" / "mix.wav").is_file()
    assert capsys.readouterr().out.endswith(f"Written to {Path('levelled', 'talk')}\n")


def test_measure_reads_files(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A 997 Hz tone of full scale on one channel reads -3.01 LUFS (ITU-R BS.1770-5 Annex 1), in table and JSON."""
    tone = np.sin(2 * np.pi * 997 * np.arange(5 * 48000) / 48000).astype(np.float32)
    path = tmp_path / "[bold]tone.wav"
    soundfile.write(path, tone, 48000, "FLOAT")
    assert run("measure", path) == 0
    table = capsys.readouterr().out
    assert table.splitlines()[2].startswith("[bold]tone.wav  0:00:05  -3.01")
    assert run("measure", "--json", path) == 0
    reading = json.loads(capsys.readouterr().out)[0]
    assert (reading["integrated_lufs"], reading["two_channels_lufs"]) == (-3.01, 0.0)
    assert reading["true_peak_dbtp"] == pytest.approx(0, abs=0.05)


def test_measured_files_of_one_name_are_told_apart(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """mix.wav of two episodes come with their folders; a name that no other file has stays without."""
    files = [tmp_path / "ep 1" / "mix.wav", tmp_path / "ep 2" / "mix.wav", tmp_path / "ep 2" / "other.wav"]
    for path in files:
        path.parent.mkdir(exist_ok=True)
        soundfile.write(path, np.zeros(4800), 48000)
    assert run("measure", *files, files[0], "--json") == 0
    assert [reading["file"] for reading in json.loads(capsys.readouterr().out)] == [
        "ep 1/mix.wav", "ep 2/mix.wav", "other.wav", "ep 1/mix.wav"]


def test_settings_say_where_they_come_from(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Each setting is named as default, session.toml or --set; all deliveries are listed."""
    (tmp_path / "session.toml").write_text(
        "target_lufs = -20\n[ride]\nrange_db = 4\n[trim]\nenabled = false\n", encoding="utf-8")
    assert run("settings", tmp_path, "--set", "ride.rate_db_s=0.5") == 0
    said = capsys.readouterr().out.splitlines()
    rows = {line.split()[0]: line.split()[1:] for line in said if line.startswith("  ")}
    assert rows["ride.range_db"] == ["4", "dB", "session.toml"]
    assert rows["trim.enabled"] == ["false", "on/off", "session.toml"]
    assert rows["ride.rate_db_s"] == ["0.5", "dB/s", "--set"]
    assert rows["expander.range_db"] == ["auto", "dB", "default"]
    assert rows["align"] == ["false", "on/off", "default"]
    assert "  in force: podcast-mono (default), -20.0 LUFS (session.toml), -1.0 dBTP (podcast-mono)" in said
    assert {row[0] for row in leveller.Settings().rows()} | set(leveller.DELIVERIES) <= set(rows)


def test_reasons_of_settings_are_told_when_asked(capsys: pytest.CaptureFixture[str]) -> None:
    """--why adds the reason of each default."""
    assert run("settings", "--why") == 0
    said = capsys.readouterr().out
    assert [why for _, _, _, why in leveller.Settings().rows() if why not in said] == []


def test_align_is_listed_with_its_option(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`settings --no-align` shows what counts then, over what session.toml says, and that the option said so."""
    (tmp_path / "session.toml").write_text("align = true\nsample_rate = 44100\n", encoding="utf-8")
    assert run("settings", tmp_path) == 0
    said = capsys.readouterr().out
    assert "  align                     true on/off                       session.toml\n" in said
    assert said.endswith("-1.0 dBTP (podcast-mono), 44100 Hz (session.toml)\n")
    assert run("settings", tmp_path, "--no-align") == 0
    assert "  align                    false on/off                       --no-align\n" in capsys.readouterr().out


# Errors


@pytest.mark.parametrize(("words", "code", "line"), [
    (["process", "{talk}/nix.wav"], 3, "leveller: {talk}/nix.wav: no such file"),
    (["process", "{talk}", "--set", "expander.rang_db=3"], 4,
     "leveller: --set unknown setting 'expander.rang_db' (did you mean \"expander.range_db\"?)"),
    (["process", "{talk}", "--set", "expander.range_db"], 4,
     "leveller: --set 'expander.range_db': expected KEY=VALUE, such as expander.range_db=18"),
    (["process", "{talk}", "--set", "align=true"], 4,
     "leveller: --set 'align=true': align has options of its own. Give --align or --no-align"),
    (["process", "{talk}", "--set", "expander.range_db=90"], 4,
     "leveller: --set expander.range_db = '90': expected auto or a number from 0 to 60 (dB)"),
    (["process", "{talk}", "--delivery", "podcast"], 4,
     "leveller: unknown delivery 'podcast' (did you mean \"podcast-mono\"?); known: podcast-mono, podcast-stereo, "
     "aes-speech, r128, r128-stream, a85"),
    (["process", "{talk}", "--stems", "raw"], 4, "leveller: stems 'raw': expected before-limiter or limited"),
    (["process", "{talk}", "--out", "{talk}"], 5,
     "leveller: {talk}: exists already. Choose another --out, or add --replace to replace it"),
    (["process", "{talk}", "--corrections", "{talk}/nix.csv"], 3,
     "leveller: {talk}/nix.csv: cannot be read (No such file or directory)"),
    (["measure", "{talk}"], 3, "leveller: {talk}: is a folder, expected audio files such as {talk}/*.wav"),
    (["settings", "{talk}/nix"], 3, "leveller: {talk}/nix: no such file or folder"),
    (["settings", "{talk}/Odo.wav"], 3, "leveller: {talk}/Odo.wav: expected a folder or a session.toml"),
    (["process"], 2, "leveller: Missing argument 'SESSION...'. See leveller process --help"),
    (["measure"], 2, "leveller: Missing argument 'FILE...'. See leveller measure --help"),
])
def test_errors_word_for_word(talk: Path, words: list[str], code: int, line: str, capsys: pytest.CaptureFixture[str],
                              ) -> None:
    """Every error is one line on the standard error and the exit code of its kind, and leaves nothing behind."""
    before = sorted(talk.parent.rglob("*"))
    assert run(*(word.format(talk=talk) for word in words)) == code
    assert capsys.readouterr() == ("", line.format(talk=talk) + "\n")
    assert sorted(talk.parent.rglob("*")) == before


@pytest.mark.parametrize("words", [["proces"], ["process", "x", "--outt", "y"], ["--nix"], ["settings", "a", "b"]])
def test_wrong_command_lines(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    """A wrong command line is one line too, says where help is, and ends with 2."""
    assert run(*words) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert said.err.count("\n") == 1
    assert said.err.startswith("leveller: ")
    assert said.err.endswith(" --help\n")


def test_debug_shows_the_way(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--debug shows the traceback, then the same line."""
    assert run("process", tmp_path / "nix.wav", "--debug") == 3
    said = capsys.readouterr().err
    assert said.startswith("Traceback (most recent call last):")
    assert said.splitlines()[-1] == f"leveller: {tmp_path / 'nix.wav'}: no such file"


def test_an_unexpected_error_is_one_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch,
                                         capsys: pytest.CaptureFixture[str]) -> None:
    """Even a fault of the program itself is one line, which says how to see more."""
    from leveller import reading

    def fail(*_: object, **__: object) -> None:
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr(reading, "measure_files", fail)
    assert run("measure", tmp_path / "a.wav") == 1
    assert capsys.readouterr().err == (
        "leveller: unexpected ZeroDivisionError: division by zero. --debug shows where\n")


@pytest.mark.skipif(os.name != "posix", reason="interruption by signal")
@pytest.mark.parametrize("presses", [1, 4])
def test_interruption_leaves_nothing(tmp_path: Path, presses: int) -> None:
    """Ctrl-C ends with 130 and one line, pressed once or impatiently; neither the folder nor a part of it is left."""
    work = tmp_path / "work"
    work.mkdir()
    shutil.copytree(DEMO, tmp_path / "demo")
    running = subprocess.Popen([sys.executable, "-m", "leveller", "process", tmp_path / "demo", "--out", work / "out"],
                               stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    deadline = time.monotonic() + 60
    while not any(work.iterdir()) and time.monotonic() < deadline:
        time.sleep(0.01)
    assert [path.name for path in work.iterdir()] == [f".out.part-{running.pid}"]
    for _ in range(presses):
        running.send_signal(signal.SIGINT)
        time.sleep(0.03)
    out, err = running.communicate(timeout=60)
    assert (running.returncode, out, err) == (130, "", "leveller: interrupted; nothing was left half-written\n")
    assert list(work.iterdir()) == []


# In a process of its own


def test_pipes_get_plain_text(talk: Path, tmp_path: Path) -> None:
    """In a pipe, and in a locale of ASCII, the summary is plain text and nothing else is printed."""
    ascii_only = {**os.environ, "PYTHONIOENCODING": "ascii", "FORCE_COLOR": "1"}
    (tmp_path / "talk").mkdir()
    shutil.copy(talk / "Odo.wav", tmp_path / "talk" / "Ödön.wav")
    done = command("process", tmp_path / "talk", "--out", tmp_path / "out", env=ascii_only)
    assert (done.returncode, done.stderr) == (0, "")
    assert "\x1b" not in done.stdout
    assert "\\xd6d\\xf6n" in done.stdout
    assert (tmp_path / "out" / "stems" / "Ödön.wav").is_file()


def test_a_reader_that_leaves(talk: Path) -> None:
    """A pipe that is closed early is no reason for a traceback."""
    running = subprocess.Popen([sys.executable, "-m", "leveller", "settings", "--why"], stdout=subprocess.PIPE,
                               stderr=subprocess.PIPE)
    assert running.stdout is not None
    assert running.stderr is not None
    running.stdout.close()
    said = running.stderr.read()
    running.stderr.close()
    running.wait(timeout=60)
    assert said == b""


def test_version_and_help() -> None:
    """--version and --help, also without any words, answer with 0 and name every command."""
    assert command("--version").stdout == f"leveller {leveller.__version__}\n"
    done, bare = command("--help"), command()
    assert (done.returncode, bare.returncode) == (0, 0)
    assert done.stdout == bare.stdout
    assert all(f"  {name} " in done.stdout for name in ("process", "measure", "settings"))


def test_help_is_quick() -> None:
    """Help waits for no library: under 0.3 s of CPU over the bare interpreter, the best of three."""
    pytest.importorskip("resource")

    def cpu_s(*words: str) -> float:
        import resource

        def used() -> float:
            usage = resource.getrusage(resource.RUSAGE_CHILDREN)
            return usage.ru_utime + usage.ru_stime

        before = used()
        subprocess.run([sys.executable, *words], capture_output=True, check=True)
        return used() - before

    bare = min(cpu_s("-c", "pass") for _ in range(3))
    assert min(cpu_s("-m", "leveller", "--help") for _ in range(3)) - bare < HELP_CPU_S


def test_help_and_package_load_nothing_heavy() -> None:
    """Neither `import leveller` nor the command line's own module loads numpy, scipy, soundfile or rich."""
    code = ("import sys, leveller, leveller.cli; "
            "print([m for m in ('numpy', 'scipy', 'soundfile', 'soxr', 'rich') if m in sys.modules])")
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_public_names_are_there() -> None:
    """Every public name loads on first use, and an unknown one is an AttributeError."""
    for name in leveller.__all__:
        assert getattr(leveller, name) is not None
    with pytest.raises(AttributeError, match="module 'leveller' has no attribute 'nix'"):
        leveller.nix  # noqa: B018
    assert set(leveller.__all__) == {name for names in leveller._HOMES.values() for name in names}


def test_linear_algebra_gets_one_thread(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """The command limits BLAS to one thread, but leaves alone what the environment says."""
    monkeypatch.setenv("OMP_NUM_THREADS", "3")
    monkeypatch.delenv("OPENBLAS_NUM_THREADS", raising=False)
    monkeypatch.delenv("MKL_NUM_THREADS", raising=False)
    assert run("--version") == 0
    assert capsys.readouterr().out == f"leveller {leveller.__version__}\n"
    assert [os.environ[name] for name in cli.THREAD_LIMITS] == ["1", "3", "1"]
