"""leveller.batch: a season unattended, on this computer and on a cluster."""

from __future__ import annotations

import csv
import dataclasses
import importlib
import json
import operator
import os
import re
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Future
from pathlib import Path
from typing import Any

import pytest
import soundfile as sf
from conversations import ConversationSpec, simulate

from leveller import cli, cluster, lanes, worker, workers
from leveller.batch import Standing, batch
from leveller.errors import InputError, OutputError, SettingsError
from leveller.fingerprint import made_by
from leveller.pipeline import process
from leveller.report.season import KEPT_LU, SeasonReport
from leveller.report.season_text import format_season
from leveller.season import read_season

batch_module = importlib.import_module("leveller.batch")  # leveller.batch may be the function
COMMAND = [sys.executable, "-m", "leveller"]
SPEC = ConversationSpec(seconds=24.0, rate_hz=16_000, people=2, gains_db=(4.0, -3.0))
LONG_S = 300.0  # of noise: long enough to be at work when it is looked for
PATIENCE_S = 60.0
EPISODES = 200
ENVIRONMENT = {**os.environ, "NO_COLOR": "1"}


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Three good episodes, one that is no sound, a folder of none, and the show's defaults."""
    folder = tmp_path_factory.mktemp("batch") / "harbour"
    for n in (1, 2, 10):
        simulate(dataclasses.replace(SPEC, seed=n)).write(folder / f"ep {n}")
    (folder / "ep 3").mkdir()
    (folder / "ep 3" / "host.wav").write_bytes(b"no sound at all" * 9)
    (folder / "artwork").mkdir()
    (folder / "season.toml").write_text('delivery = "podcast-stereo"\n[expander]\nrange_db = 12\n')
    return folder


@pytest.fixture
def season(made: Path, tmp_path: Path) -> Path:
    """A copy of that season, to be changed."""
    return Path(shutil.copytree(made, tmp_path / "harbour"))


@pytest.fixture(scope="module")
def first(made: Path) -> tuple[SeasonReport, Path, list[Standing]]:
    """The first run over the season."""
    said: list[Standing] = []
    out = made.parent / "out"
    return batch(made, out=out, jobs=2, on_season=said.append), out, said


class Here:
    """An executor in this very process: what is not about processes needs none of them."""

    places = 1
    lost: tuple[type[BaseException], ...] = ()

    def __enter__(self) -> Here:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def stop(self) -> None:
        pass

    def submit(self, function: Callable[..., Any], *arguments: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(function(*arguments))
        return future


@pytest.fixture
def in_process(monkeypatch: pytest.MonkeyPatch) -> None:
    """Batches run in this process."""
    monkeypatch.setattr("leveller.batch._workers", lambda *_: Here())


def outcomes(report: SeasonReport) -> dict[str, str]:
    """What every episode came to."""
    return {episode.episode: episode.outcome for episode in report.episodes}


def files_of(folder: Path) -> dict[str, bytes]:
    """All files of a result; .sources.json, which a batch adds, says when the sources were saved."""
    return {str(path.relative_to(folder)): path.read_bytes() for path in folder.rglob("*")
            if path.is_file() and path.name != ".sources.json"}


def hidden(folder: Path) -> list[str]:
    """What is left half-written in a folder."""
    return [path.name for path in folder.rglob(".*.part-*")] + [path.name for path in folder.rglob(".*.old-*")]


def until(found: Callable[[], Any], what: str) -> Any:
    """Wait for something that is true in the end."""
    end = time.monotonic() + PATIENCE_S
    while time.monotonic() < end:
        value = found()
        if value:
            return value
        time.sleep(0.02)
    raise AssertionError(f"never came: {what}")


def worker_at(out: Path, name: str) -> int:
    """The process that is at work on an episode by now."""
    def look() -> int | None:
        found = [path.name.rpartition("-")[2] for path in out.glob(f".{name}.part-*")]
        return int(found[0]) if found else None
    pid: int = until(look, f"work on {name}")
    return pid


def long_episode(folder: Path) -> None:
    """An episode that takes a while."""
    import numpy as np

    folder.mkdir(parents=True)
    noise = np.random.default_rng(3).standard_normal((int(LONG_S * 8000), 2)).astype("float32") * 0.01
    for i in range(2):
        sf.write(folder / f"mic {i}.wav", noise[:, i], 8000, subtype="PCM_16")


def test_one_bad_episode_stops_nothing(first: tuple[SeasonReport, Path, list[Standing]]) -> None:
    """The bad episode's reason is recorded, the others are finished, and the exit code says so."""
    report, out, said = first
    assert outcomes(report) == {"ep 1": "finished", "ep 2": "finished", "ep 3": "failed", "ep 10": "finished"}
    assert report.exit_code == 7
    bad = report.episodes[2]
    assert "host.wav" in bad.reason
    assert not (out / "ep 3").exists()
    assert all((out / name / "mix.wav").exists() for name in ("ep 1", "ep 2", "ep 10"))
    assert hidden(out) == []
    assert report.notes == ("artwork: no audio directly in it, left out",)
    assert said[-1] == Standing(4, 4, 1, ())
    texts = [line.text for line in format_season(report, out="out")]
    assert texts[-3] == f"failed: ep 3: {bad.reason}"
    assert texts[-2] == "4 episodes: 3 finished, 1 failed"
    assert texts[-1].startswith("Mend what the lines above name and give the same command again")


def test_the_season_counts_like_the_session_alone(
    made: Path, first: tuple[SeasonReport, Path, list[Standing]]
) -> None:
    """An episode of a batch has the same bytes as one that is processed alone, under the same season.toml."""
    process(made / "ep 1", out=made.parent / "alone" / "ep 1")  # as far from its sources, which its page links to
    alone, here = (files_of(folder / "ep 1") for folder in (made.parent / "alone", first[1]))
    assert {"mix.wav", "automation.csv", "report.json", "stems/seat 1.wav"} <= set(alone)
    assert alone == here
    said = json.loads(alone["report.json"])
    assert said["delivery"]["name"] == "podcast-stereo"
    assert said["settings"]["expander.range_db"] == 12


def test_the_number_of_jobs_changes_no_byte(
    made: Path, first: tuple[SeasonReport, Path, list[Standing]], tmp_path: Path
) -> None:
    """One job, two jobs, or nothing said (so that a lone episode has all processors): every file is the same."""
    one = made.parent / "one"
    batch(made, out=one, jobs=1)
    (tmp_path / "list.csv").write_text(f"session\n{made / 'ep 1'}\n")
    batch(tmp_path / "list.csv", out=tmp_path / "free", delivery="podcast-stereo", settings={"expander.range_db": 12})
    for name in ("ep 1", "ep 2", "ep 10"):
        assert files_of(one / name) == files_of(first[1] / name), name
    sound = [name for name in files_of(first[1] / "ep 1") if name.endswith((".wav", ".csv"))]
    assert len(sound) >= 6
    for name in sound:
        assert (tmp_path / "free" / "ep 1" / name).read_bytes() == (first[1] / "ep 1" / name).read_bytes(), name


@pytest.mark.parametrize(("processors", "episodes", "jobs", "cluster", "threads"), [
    (8, 20, None, None, 1), (8, 3, None, None, 2), (8, 1, None, None, 8), (2, 2, None, None, 1),
    (8, 3, 3, None, 1), (8, 1, 1, None, 1), (8, 1, None, "tcp://10.0.0.5:8786", 1),
])
def test_jobs_say_how_much_of_the_machine_is_used(
    processors: int, episodes: int, jobs: int | None, cluster: str | None, threads: int,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """A job is one processor; only where nobody said how many do a few episodes share all processors."""
    for module in (batch_module, workers):
        monkeypatch.setattr(module, "processor_count", lambda: processors)
    monkeypatch.setattr(workers, "_free_bytes", lambda: None)
    assert batch_module._threads_each(episodes, jobs, cluster) == threads


def test_a_containers_memory_counts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The narrowest limit of the groups a process is in says how many jobs there is memory for; cache is free."""
    monkeypatch.setattr(workers, "processor_count", lambda: 16)
    monkeypatch.setattr(workers, "PROC", tmp_path / "proc")
    monkeypatch.setattr(workers, "CGROUPS", tmp_path / "cgroup")
    assert workers.default_jobs() == 16
    (tmp_path / "proc" / "self").mkdir(parents=True)
    (tmp_path / "proc" / "meminfo").write_text(f"MemFree: 12 kB\nMemAvailable: {12 * workers.JOB_BYTES // 1024} kB\n")
    assert workers.default_jobs() == 12
    (tmp_path / "proc" / "self" / "cgroup").write_text("1:name=systemd:/x\n0::/box/run\n")

    def limited(name: str, most: str, current: int, cache: int) -> None:
        group = tmp_path / "cgroup" / name
        group.mkdir(parents=True, exist_ok=True)
        (group / "memory.max").write_text(f"{most}\n")
        (group / "memory.current").write_text(f"{current}\n")
        (group / "memory.stat").write_text(f"anon 1\ninactive_file {cache}\nactive_file 0\n")

    limited("box/run", "max", workers.JOB_BYTES, 0)
    assert workers.default_jobs() == 12
    limited("box", str(6 * workers.JOB_BYTES), 4 * workers.JOB_BYTES, 3 * workers.JOB_BYTES)
    assert workers.default_jobs() == 5
    limited("box/run", str(workers.JOB_BYTES // 2), 0, 0)
    assert workers.default_jobs() == 1


def test_a_worker_keeps_to_its_threads(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The limit of a task holds while its episode is processed, and no longer."""
    monkeypatch.setattr(lanes, "processor_count", lambda: 4)
    seen: list[int] = []
    monkeypatch.setattr(worker, "_outcome", lambda task, *_: seen.append(lanes.thread_count()))
    (tmp_path / "desk").mkdir()
    task = worker.Task(read_season(made).episodes[0], str(tmp_path / "x"), str(tmp_path / "desk"),
                       tuple(made_by().items()))
    for threads in (1, 3):
        worker.work(dataclasses.replace(task, threads=threads))
    assert seen == [1, 3]
    assert lanes.thread_count() == 4


def test_a_season_report_says_it_all(first: tuple[SeasonReport, Path, list[Standing]]) -> None:
    """season.csv, season.json and the episode's own reports agree; only the season knows how long it took."""
    report, out, _ = first
    with open(out / "season.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [(row["row"], row["episode"]) for row in rows[:4]] == [
        ("episode", "ep 1"), ("voice", "ep 1"), ("voice", "ep 1"), ("episode", "ep 2")]
    own = json.loads((out / "ep 1" / "report.json").read_text())
    assert float(rows[0]["integrated_lufs"]) == own["mix"]["integrated_lufs"]
    assert float(rows[0]["range_lu"]) == own["mix"]["range_lu"]
    assert rows[0]["delivery_met"] == "yes"
    assert float(rows[1]["level_lufs"]) == own["voices"][0]["after_lufs"]
    assert float(rows[1]["against_lu"]) == pytest.approx(own["voices"][0]["after_lufs"] + 16.0)
    with open(out / "ep 1" / "listen.csv", encoding="utf-8", newline="") as file:
        places = list(csv.DictReader(file))
    listen_s = sum(float(place["to_s"]) - float(place["from_s"]) for place in places)
    assert float(rows[0]["listen_s"]) == pytest.approx(listen_s, abs=0.05)
    assert float(rows[0]["took_s"]) > 0
    assert "took_s" not in (out / "ep 1" / "report.json").read_text()
    kept = json.loads((out / "season.json").read_text())
    assert [episode["outcome"] for episode in kept["episodes"]] == [o.outcome for o in report.episodes]
    assert kept["sentence"] == report.sentence


def test_a_voice_lies_at_one_level_over_the_season(first: tuple[SeasonReport, Path, list[Standing]]) -> None:
    """After make-up every voice of the same name lies within 0.5 LU of itself."""
    report = first[0]
    assert [(voice.voice, voice.episodes) for voice in report.voices] == [("seat 1", 3), ("seat 2", 3)]
    for voice in report.voices:
        assert voice.highest_lu - voice.lowest_lu <= KEPT_LU
        assert voice.kept


def test_unchanged_episodes_are_left_alone(season: Path, tmp_path: Path, in_process: None) -> None:
    """A second run processes what was mended, changed or is new, and nothing else; --again processes all."""
    shutil.rmtree(season / "ep 10")
    out = tmp_path / "out"
    took = {e.episode: e.took_s for e in batch(season, out=out).episodes}
    shutil.rmtree(season / "ep 3")
    os.utime(season / "ep 1" / "seat 1.wav", (1, 1))  # another time, the same sound
    report = batch(season, out=out, jobs=1)
    assert outcomes(report) == {"ep 1": "unchanged", "ep 2": "unchanged"}
    assert report.exit_code == 0
    assert {e.episode: e.took_s for e in report.episodes} == pytest.approx(
        {"ep 1": took["ep 1"], "ep 2": took["ep 2"]}, abs=0.051)  # as season.json rounds it
    assert took["ep 1"] is not None
    (season / "ep 1" / "session.toml").write_text('delivery = "r128"\n')
    samples, rate = sf.read(season / "ep 2" / "seat 1.wav")
    sf.write(season / "ep 2" / "seat 1.wav", samples * 0.5, rate, subtype="PCM_24")
    assert outcomes(batch(season, out=out, jobs=1)) == {"ep 1": "finished", "ep 2": "finished"}
    assert json.loads((out / "ep 1" / "report.json").read_text())["delivery"]["target_lufs"] == -23.0
    assert outcomes(batch(season, out=out, jobs=1, settings={"expander.range_db": 9})) == {
        "ep 1": "finished", "ep 2": "finished"}
    again = batch(season, out=out, jobs=1, settings={"expander.range_db": 9}, again=True)
    assert outcomes(again) == {"ep 1": "finished", "ep 2": "finished"}


def test_what_was_edited_by_hand_stays(season: Path, tmp_path: Path, in_process: None) -> None:
    """A table saved after the report, or a rendering of one, is kept until --again; a foreign folder always."""
    for name in ("ep 3", "ep 10"):
        shutil.rmtree(season / name)
    out = tmp_path / "out"
    (out / "ep 2").mkdir(parents=True)
    (out / "ep 2" / "notes.txt").write_text("mine")
    report = batch(season, out=out, jobs=1)
    assert outcomes(report) == {"ep 1": "finished", "ep 2": "failed"}
    assert "is no result of leveller's" in report.episodes[1].reason
    edited = out / "ep 1" / "automation.csv"
    edited.write_text(edited.read_text() + "\r\n")
    os.utime(edited, (time.time() + 60,) * 2)
    options = {"out": out, "jobs": 1, "settings": {"expander.range_db": 9}}
    assert outcomes(batch(season, **options))["ep 1"] == "edited"
    assert edited.read_text().endswith("\n\n")
    assert outcomes(batch(season, again=True, **options))["ep 1"] == "finished"
    assert (out / "ep 2" / "notes.txt").read_text() == "mine"


def test_a_lost_worker_takes_its_episode_along_once(season: Path, tmp_path: Path) -> None:
    """A killed worker's episode is tried once more; killed twice it is recorded, and the others are finished."""
    shutil.rmtree(season / "ep 10")
    shutil.rmtree(season / "ep 3")
    long_episode(season / "ep 0")
    out = tmp_path / "out"
    killed: list[int] = []

    def kill_twice() -> None:
        for _ in range(2):
            pid = until(lambda: (p := worker_at(out, "ep 0")) not in killed and p, "another worker")
            os.kill(pid, signal.SIGKILL)
            killed.append(pid)

    killer = threading.Thread(target=kill_twice)
    killer.start()
    report = batch(season, out=out, jobs=2)
    killer.join()
    assert outcomes(report) == {"ep 0": "failed", "ep 1": "finished", "ep 2": "finished"}
    assert report.episodes[0].reason == worker.LOST
    assert report.episodes[0].tries == 2
    assert hidden(out) == []


def test_a_worker_lost_once_costs_nothing(season: Path, tmp_path: Path) -> None:
    """After one kill all episodes are finished."""
    for name in ("ep 2", "ep 3", "ep 10"):
        shutil.rmtree(season / name)
    out = tmp_path / "out"
    killer = threading.Thread(target=lambda: os.kill(worker_at(out, "ep 1"), signal.SIGKILL))
    killer.start()
    report = batch(season, out=out, jobs=1)
    killer.join()
    assert outcomes(report) == {"ep 1": "finished"}
    assert report.episodes[0].tries == 2
    assert hidden(out) == []


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="only where the system shows blocked signals")
def test_a_terminals_signals_reach_no_helper(tmp_path: Path) -> None:
    """From its first moment the first worker does not get Ctrl-C or a hang-up, nor does multiprocessing's tracker."""
    (tmp_path / "look.py").write_text(
        "from multiprocessing import resource_tracker\nfrom pathlib import Path\n"
        "from leveller.workers import LocalWorkers\n"
        "def blocked(text):\n    return int(text.partition('SigBlk:')[2].split()[0], 16)\n"
        "if __name__ == '__main__':\n"
        "    with LocalWorkers(1) as workers:\n"
        "        worker = workers.submit(Path.read_text, Path('/proc/self/status')).result()\n"
        "        tracker = Path(f'/proc/{resource_tracker._resource_tracker._pid}/status').read_text()\n"
        "        print(blocked(worker), blocked(tracker))\n")
    command = [sys.executable, str(tmp_path / "look.py")]
    run = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE_S)
    worker_, tracker = map(int, run.stdout.split())
    hang_up, interrupt = (1 << number - 1 for number in (signal.SIGHUP, signal.SIGINT))
    assert worker_ & (hang_up | interrupt) == hang_up | interrupt
    assert tracker & hang_up


def test_what_a_killed_season_left_goes(season: Path, tmp_path: Path, in_process: None) -> None:
    """Work folders of dead workers go with the next run, of unchanged episodes too; what is not an episode's stays."""
    out, dead = tmp_path / "out", 2**22 + 5  # beyond the kernel's highest number
    batch(season, out=out, jobs=1)
    for name in (f".ep 1.part-{dead}", f".ep 1.old-{dead}", f".ep 1.part-{os.getppid()}", f".mine.part-{dead}"):
        (out / name / "stems").mkdir(parents=True)
        (out / name / "stems" / "big.wav").write_bytes(b"x")
    assert outcomes(batch(season, out=out, jobs=1))["ep 1"] == "unchanged"
    assert sorted(hidden(out)) == sorted([f".ep 1.part-{os.getppid()}", f".mine.part-{dead}"])


@pytest.mark.parametrize("ending", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGKILL])
def test_an_ended_batch_leaves_whole_episodes_only(season: Path, tmp_path: Path, ending: signal.Signals) -> None:
    """After Ctrl-C, a shutdown, a closed terminal or a kill, finished episodes stay whole and the next run goes on."""
    for name in ("ep 2", "ep 3", "ep 10"):
        shutil.rmtree(season / name)
    long_episode(season / "ep 2")
    simulate(dataclasses.replace(SPEC, seed=3)).write(season / "ep 3")
    out = tmp_path / "out"
    run = subprocess.Popen([*COMMAND, "batch", str(season), "--out", str(out), "--jobs", "1"], env=ENVIRONMENT,
                           stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True)
    pid = worker_at(out, "ep 2")
    run.send_signal(ending)
    text, errors = run.communicate(timeout=PATIENCE_S)
    until(lambda: not Path(f"/proc/{pid}").exists() or not hidden(out), "the end of the worker")
    assert (out / "ep 1" / "report.json").exists()
    assert not (out / "ep 2").exists()
    if ending != signal.SIGKILL:
        assert run.returncode == 130, errors
        assert errors == ""
        assert hidden(out) == []
        assert text.splitlines()[-2:] == [
            "3 episodes: 1 finished, 2 not reached",
            "Interrupted; 2 not reached. The same command goes on from here"]
    shutil.rmtree(season / "ep 2")
    report = batch(season, out=out, jobs=1)
    assert outcomes(report) == {"ep 1": "unchanged", "ep 3": "finished"}
    assert [name for name in hidden(out) if "ep 2" not in name] == []


@pytest.mark.parametrize("place", [
    "leveller.desk.Desk._make", "leveller.desk.Desk._end", "leveller.batch._Run._hand_out",
    "leveller.batch.season_report", "leveller.batch.write_season"])
def test_an_interruption_in_the_middle_of_something_waits(
    season: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, in_process: None, place: str
) -> None:
    """Ctrl-C while the desk is made, work handed out, or the end tidied up: nothing is left, reports are whole."""
    owner, _, name = place.rpartition(".")
    holder = operator.attrgetter(owner.partition(".")[2])(sys.modules["leveller"]) if "._" in place else batch_module
    done = getattr(holder, name)

    def struck(*words: Any, **named: Any) -> Any:
        os.kill(os.getpid(), signal.SIGINT)
        os.kill(os.getpid(), signal.SIGTERM)
        return done(*words, **named)

    monkeypatch.setattr(holder, name, struck)
    out = tmp_path / "out"
    try:
        report = batch(season, out=out, jobs=1)
        assert report.exit_code in (7, 130)
        assert json.loads((out / "season.json").read_text())["sentence"] == report.sentence
    except KeyboardInterrupt:
        assert place == "leveller.desk.Desk._make"
        assert not out.exists()
    assert hidden(tmp_path) == []


def test_reports_that_cannot_be_written_are_told(
    season: Path, tmp_path: Path, in_process: None, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A full disk at the very end: the summary is printed all the same, earlier reports stay, the exit code is 5."""
    out = tmp_path / "out"
    batch(season, out=out, jobs=1)
    before = {path.name: path.read_bytes() for path in out.glob("season.*")}
    write = Path.write_bytes

    def full(self: Path, data: bytes) -> int:
        if self.name == "season.html":
            raise OSError(28, "No space left on device")
        return write(self, data)

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(SystemExit) as left:
        cli.main(["batch", str(season), "--out", str(out)])
    said = capsys.readouterr()
    assert left.value.code == 5
    assert said.err == (f"leveller: {out}: season.html cannot be written (No space left on device). The episodes are "
                        "not touched by that; make room and give the same command again\n")
    assert "4 episodes: 3 unchanged, 1 failed" in said.out
    assert {path.name: path.read_bytes() for path in out.glob("season.*")} == before
    assert hidden(out) == []


def test_two_batches_keep_out_of_each_others_way(season: Path, tmp_path: Path) -> None:
    """A folder in which another batch is at work is refused."""
    out = tmp_path / "out"
    out.mkdir()
    other = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    try:
        (out / f".season.json.part-{other.pid}").mkdir()
        with pytest.raises(OutputError, match=rf"another batch \(process {other.pid}\) is at work here"):
            batch(season, out=out)
    finally:
        other.communicate(b"\n")


def test_bad_options_are_refused_at_the_door(made: Path, tmp_path: Path) -> None:
    """What would fail for every episode is said once, and nothing is written."""
    for options, message in (
        ({"jobs": 0}, "--jobs 0: expected a number from 1 to 256"),
        ({"delivery": "r129"}, "unknown delivery 'r129'"),
        ({"stems": "loud"}, "stems 'loud': expected before-limiter or limited"),
        ({"settings": {"expander.rang_db": 3}}, "unknown setting 'expander.rang_db'"),
    ):
        with pytest.raises(SettingsError, match=re.escape(message)):
            batch(made, out=tmp_path / "out", **options)
    with pytest.raises(OutputError, match="is the season's own folder"):
        batch(made, out=made)
    with pytest.raises(InputError, match="no such file or folder"):
        batch(tmp_path / "none", out=tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_list_gives_each_episode_its_settings(season: Path, tmp_path: Path, in_process: None) -> None:
    """A CSV list and a TOML list say where an episode is, what it is called and what is set for it alone."""
    (season / "list.csv").write_text(
        "session;name;delivery;expander.range_db\r\nep 1;Tide tables;r128;7,5\r\nep 2;;;\r\n")
    report = batch(season / "list.csv", out=tmp_path / "csv", jobs=2)
    assert outcomes(report) == {"Tide tables": "finished", "ep 2": "finished"}
    one, two = (json.loads((tmp_path / "csv" / name / "report.json").read_text()) for name in ("Tide tables", "ep 2"))
    assert (one["delivery"]["name"], one["settings"]["expander.range_db"]) == ("r128", 7.5)
    assert (two["delivery"]["name"], two["settings"]["expander.range_db"]) == ("podcast-stereo", 12)
    (season / "season.toml").write_text(
        'delivery = "a85"\n[[episode]]\nsession = "ep 1"\nname = "Tide tables"\n[episode.expander]\nrange_db = 8\n'
        '[[episode]]\nsession = ["ep 2/seat 1.wav", "ep 2/seat 2.wav"]\nstems = "limited"\n')
    report = batch(season, out=tmp_path / "toml", jobs=2)
    assert outcomes(report) == {"Tide tables": "finished", "ep 2": "finished"}
    one, two = (json.loads((tmp_path / "toml" / name / "report.json").read_text()) for name in ("Tide tables", "ep 2"))
    assert (one["delivery"]["name"], one["settings"]["expander.range_db"], one["stems"]) == ("a85", 8, "before-limiter")
    assert (two["delivery"]["name"], two["settings"]["expander.range_db"], two["stems"]) == ("a85", "auto", "limited")
    assert read_season(season).episodes[1].name == "ep 2"


def test_align_is_for_all_or_for_one_episode(
    tmp_path: Path, in_process: None, capsys: pytest.CaptureFixture[str]
) -> None:
    """--align lines up all, `align` in season.toml too, in a list its own; a change processes the episode again.

    An episode that does not line up says so in the season's report.
    """
    mics = simulate(ConversationSpec(seed=5, seconds=60, rate_hz=16_000, room="desk", people=2)).mics
    for name in ("ep 1", "ep 2"):
        (tmp_path / "season" / name).mkdir(parents=True)
        for track, samples in (("host", mics[:, 0]), ("guest", mics[2 * 16_000 :, 1])):
            sf.write(tmp_path / "season" / name / f"{track}.wav", samples, 16_000, subtype="PCM_24")
    listed = tmp_path / "season" / "list.csv"

    def said(*words: str, align: tuple[str, str] = ("", ""), show: str = "") -> list[tuple[str, bool]]:
        (tmp_path / "season" / "season.toml").write_text(show)
        listed.write_text("session,align\n" + "".join(f"ep {n},{word}\n" for n, word in enumerate(align, 1)))
        with pytest.raises(SystemExit) as left:
            cli.main(["batch", str(listed), "--out", str(tmp_path / "out"), *words])
        assert left.value.code == 0
        capsys.readouterr()
        report = json.loads((tmp_path / "out" / "season.json").read_text())
        lines = [json.loads((tmp_path / "out" / e["episode"] / "report.json").read_text())["timeline"]
                 for e in report["episodes"]]
        for episode, line in zip(report["episodes"], lines, strict=True):
            warned = [": 2.000 s " in remark and "--align corrects it" in remark for remark in episode["remarks"]]
            assert warned == ([True] if line == "opened" else []), episode["remarks"]
        return [(e["outcome"], line != "opened") for e, line in zip(report["episodes"], lines, strict=True)]

    assert said() == [("finished", False)] * 2
    assert said(align=("yes", "no")) == [("finished", True), ("unchanged", False)]
    assert said("--align") == [("unchanged", True), ("finished", True)]
    assert said("--align") == [("unchanged", True)] * 2
    assert said(align=("", "yes")) == [("finished", False), ("unchanged", True)]
    assert said(show="align = true") == [("finished", True), ("unchanged", True)]
    assert said(align=("no", ""), show="align = true") == [("finished", False), ("unchanged", True)]
    assert said("--no-align", show="align = true") == [("unchanged", False), ("finished", False)]


@pytest.mark.long
def test_batch_itself_costs_next_to_nothing(tmp_path: Path) -> None:
    """Beyond the processing an episode takes under 0.2 s of processor time, and the parent's memory stays flat."""
    import resource

    def used_s() -> float:
        return sum(sum(resource.getrusage(who)[:2]) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN))

    def resident_mb(_: Standing) -> None:
        status = Path("/proc/self/status").read_text()
        resident.append(int(re.search(r"VmRSS:\s+(\d+)", status)[1]) / 1024)  # type: ignore[index]

    talk = simulate(dataclasses.replace(SPEC, seconds=10.0))
    for n in range(EPISODES):
        talk.write(tmp_path / "season" / f"ep {n}")
    resident: list[float] = []
    before_s = used_s()
    report = batch(tmp_path / "season", out=tmp_path / "out", jobs=2, on_season=resident_mb)
    beyond_s = used_s() - before_s - sum(episode.cpu_s or 0.0 for episode in report.episodes)
    assert report.count("finished") == EPISODES
    assert beyond_s / EPISODES < 0.2
    assert resident[-1] - resident[0] < 8


# ---------------------------------------------------------------------------------------------- a cluster on loopback


@pytest.fixture
def dask(tmp_path: Path) -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """A scheduler and two workers, each a process of its own."""
    file, started = tmp_path / "scheduler.json", []

    def start(*words: str) -> None:
        started.append(subprocess.Popen(
            [sys.executable, "-m", *words], cwd=tmp_path, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL))

    start("distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
          "--scheduler-file", str(file))
    try:
        address = until(lambda: file.exists() and file.stat().st_size and json.loads(file.read_text())["address"],
                        "the scheduler")
        for n in range(2):
            start("distributed.cli.dask_worker", address, "--no-nanny", "--nthreads", "1", "--no-dashboard", "--name",
                  f"w{n}", "--local-directory", str(tmp_path / f"w{n}"))
        until(lambda: all((tmp_path / f"w{n}").exists() for n in range(2)), "the workers")
        yield address, started
    finally:
        for process_ in reversed(started):
            process_.kill()
            process_.wait()


def connected(address: str, count: int) -> None:
    """Wait until the scheduler has its workers."""
    from distributed import Client

    with Client(address, set_as_default=False) as client:
        client.wait_for_workers(count, timeout=PATIENCE_S)


@pytest.mark.filterwarnings("default")
def test_a_cluster_finishes_what_a_lost_worker_began(
    season: Path, tmp_path: Path, dask: tuple[str, list[subprocess.Popen[bytes]]]
) -> None:
    """With a real scheduler and two workers, one killed in the middle, all episodes are those of this computer."""
    address, started = dask
    long_episode(season / "ep 0")
    connected(address, 2)
    out = tmp_path / "out"

    def kill_one() -> None:
        pid = worker_at(out, "ep 0")
        process_ = next(process_ for process_ in started[1:] if process_.pid == pid)
        process_.kill()
        process_.wait()

    killer = threading.Thread(target=kill_one)
    killer.start()
    report = batch(season, out=out, cluster=address)
    killer.join()
    assert outcomes(report) == {"ep 0": "finished", "ep 1": "finished", "ep 2": "finished", "ep 3": "failed",
                                "ep 10": "finished"}
    assert report.episodes[0].tries == 2
    assert report.exit_code == 7
    assert hidden(out) == []
    for name in ("ep 0", "ep 2"):
        shutil.rmtree(season / name)
    here = batch(season, out=tmp_path / "here", jobs=1)
    assert here.count("finished") == 2
    for name in ("ep 1", "ep 10"):
        for file in ("mix.wav", "report.json"):
            assert (out / name / file).read_bytes() == (tmp_path / "here" / name / file).read_bytes(), (name, file)


def test_a_cluster_that_cannot_be_used_is_refused(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """No scheduler, other versions, no leveller, no shared storage: one clear line each."""
    monkeypatch.setattr(cluster, "ANSWER_S", 1)
    with pytest.raises(SettingsError, match=r"--cluster tcp://127\.0\.0\.1:9: no scheduler answers"):
        batch(made, out=tmp_path / "out", cluster="tcp://127.0.0.1:9")
    assert not (tmp_path / "out").exists()
    good = {"made_by": made_by(), "sees": True}
    cluster.check_answers({"w0": good}, tmp_path)
    older = {**good, "made_by": {**made_by(), "leveller": "0.0.9"}}
    mine = made_by()["leveller"]
    with pytest.raises(SettingsError, match=f"worker w1: leveller 0.0.9 instead of {mine}. Install the same versions"):
        cluster.check_answers({"w0": good, "w1": older}, tmp_path)
    with pytest.raises(SettingsError, match=r"worker w1: cannot run leveller \(No module named 'leveller'\)"):
        cluster.check_answers({"w1": ModuleNotFoundError("No module named 'leveller'")}, tmp_path)
    with pytest.raises(InputError, match="worker w1: does not see"):
        cluster.check_answers({"w1": {**good, "sees": False}}, tmp_path)


def test_a_worker_of_another_version_refuses_its_episode(made: Path, tmp_path: Path) -> None:
    """A worker that joined later compares the versions before it reads anything."""
    episode = read_season(made).episodes[0]
    task = worker.Task(episode, str(tmp_path / "x"), str(tmp_path), (("leveller", "9.9"),))
    found = worker.work(task)
    assert found.outcome == "failed"
    assert found.reason.startswith(f"the worker has leveller {made_by()['leveller']} instead of 9.9. Install")
    unseen = dataclasses.replace(task, made_by=tuple(made_by().items()), desk=str(tmp_path / "elsewhere" / "desk"))
    assert "must lie on storage that all workers share" in worker.work(unseen).reason
