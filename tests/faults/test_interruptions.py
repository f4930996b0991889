"""Nothing is lost: kills, damage, changed inputs, a full disk and two runs at once."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from seedaudit.auditing import audit, open_checkpoint
from seedaudit.errors import DataError, StudyError
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep import checkpoint as checkpoint_module
from tests.small_study import write_small_study

ROOT = Path(__file__).resolve().parents[2]

# A process that has loaded everything and forks a run for each line of words that it reads: loading
# takes longer than a small run. Participants take long enough to be killed between and within
# them, and progress is kept after each of them.
FORKING_RUNS = """
import json, os, sys, time
import seedaudit.auditing, seedaudit.overview, seedaudit.progress, seedaudit.report.explorer
import seedaudit.report.figures, seedaudit.store
from seedaudit.cli import main
from seedaudit.sweep import checkpoint, fold
whole = fold.sweep_participant
def slow(*arguments):
    time.sleep(0.04)
    return whole(*arguments)
fold.sweep_participant = slow
checkpoint.Checkpoint.__init__.__kwdefaults__["every"] = 0.0
for line in sys.stdin:
    asked = json.loads(line)
    if "end_of" in asked:
        print(os.waitstatus_to_exitcode(os.waitpid(asked["end_of"], 0)[1]), flush=True)
        continue
    child = os.fork()
    if child:
        print(child, flush=True)
        continue
    os.chdir(asked["folder"])
    for number, name in enumerate((os.devnull, asked["out"], asked["err"])):
        os.dup2(os.open(name, os.O_RDWR | os.O_CREAT | os.O_TRUNC), number)
    code = main(asked["words"])
    sys.stdout.flush()
    os._exit(code)
"""


class Runs:
    """Starts runs as processes of their own, and tells how they ended."""

    def __init__(self) -> None:
        self._parent = subprocess.Popen(
            [sys.executable, "-c", FORKING_RUNS], stdin=subprocess.PIPE, stdout=subprocess.PIPE,
            text=True, env={**os.environ, "PYTHONPATH": str(ROOT)},
        )  # fmt: skip

    def ask(self, **words: object) -> int:
        self._parent.stdin.write(json.dumps(words) + "\n")
        self._parent.stdin.flush()
        return int(self._parent.stdout.readline())

    def close(self) -> None:
        self._parent.stdin.close()
        self._parent.wait(timeout=30)


RUNS: list[Runs] = []


class Process:
    """One run, with what of a `Popen` is needed here."""

    def __init__(self, words: list[str], told: Path) -> None:
        self.out, self.err = (told.with_suffix(f".{kind}") for kind in ("out", "err"))
        self.pid = RUNS[0].ask(
            words=words, out=str(self.out), err=str(self.err), folder=str(told.parent)
        )
        self.returncode: int | None = None

    def poll(self) -> int | None:
        """None while it is at work; a dead one that nobody waited for counts as ended."""
        if self.returncode is None:
            state = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()[0]
            if state != "Z":
                return None
            self.returncode = RUNS[0].ask(end_of=self.pid)
        return self.returncode

    def send_signal(self, number: int) -> None:
        if self.poll() is None:
            os.kill(self.pid, number)

    def communicate(self, timeout: float = 60) -> tuple[str, str]:
        limit = time.monotonic() + timeout
        while self.poll() is None:
            assert time.monotonic() < limit, "still at work"
            time.sleep(0.002)
        return self.out.read_text(), self.err.read_text()


@pytest.fixture(scope="module", autouse=True)
def runs():
    RUNS.append(Runs())
    yield
    RUNS.pop().close()


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    folder = tmp_path_factory.mktemp("study")
    small = write_small_study(folder, participants=6)
    text = small.study_file.read_text().replace("folds = 4", "folds = 3")
    small.study_file.write_text(text)
    return small.study_file


@pytest.fixture(scope="module")
def undisturbed(study):
    return result_bytes(study.parent / run_to_end(study, "undisturbed"))


def start(study: Path, out: str, *options: str) -> Process:
    folder = study.parent
    words = ["run", str(study), "--out", str(folder / out), "--workers", "2", *options]
    return Process(words, folder / f"{out}-{time.monotonic_ns()}")


def run_to_end(study: Path, out: str, *options: str, code: int = 0) -> str:
    process = start(study, out, *options)
    _, messages = process.communicate(timeout=120)
    assert process.returncode == code, messages
    return out


def result_bytes(folder: Path) -> dict[str, bytes]:
    """Every table and map of a result."""
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for part in ("tables", "maps")
        for path in sorted((folder / part).iterdir())
    }


def progress_of(study: Path, out: str) -> Path:
    return study.parent / f".{out}.progress"


def wait_for_progress(study: Path, out: str, process: Process) -> None:
    """Until the first participants are on disk, so that the kill has something to spoil."""
    limit = time.monotonic() + 60
    while not list(progress_of(study, out).glob("fold-*.npz")):
        assert process.poll() is None, process.err.read_text()
        assert time.monotonic() < limit
        time.sleep(0.005)


def test_twenty_kills_at_random_moments(study, undisturbed):
    """kill -9, again and again; the same command goes on and ends with the same bytes."""
    rng = np.random.default_rng(7)
    kills = 0
    for round_number in range(8):
        out = f"killed-{round_number}"
        for _ in range(3):
            process = start(study, out)
            wait_for_progress(study, out, process)
            time.sleep(rng.uniform(0, 0.25))
            alive = process.poll() is None
            process.send_signal(signal.SIGKILL)
            process.communicate()
            kills += alive
            assert not alive or not (study.parent / out).exists()
            if not alive:
                break
        if not (study.parent / out).exists():
            run_to_end(study, out)
        assert result_bytes(study.parent / out) == undisturbed
        assert not progress_of(study, out).exists()
    assert kills >= 20


def test_interrupt_keeps_progress_and_says_how_to_go_on(study, undisturbed):
    out = "interrupted"
    process = start(study, out)
    wait_for_progress(study, out, process)
    process.send_signal(signal.SIGINT)
    _, messages = process.communicate(timeout=60)
    assert process.returncode == 130
    assert "the same command goes on" in messages
    assert not (study.parent / out).exists()
    assert list(progress_of(study, out).glob("fold-*.npz"))
    process = start(study, out)
    _, messages = process.communicate(timeout=60)
    assert "going on from earlier progress" in messages
    assert result_bytes(study.parent / out) == undisturbed


def test_second_interrupt_ends_at_once_and_leaves_usable_progress(study, undisturbed):
    out = "interrupted-twice"
    process = start(study, out)
    wait_for_progress(study, out, process)
    process.send_signal(signal.SIGINT)
    time.sleep(0.02)
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=10)
    assert process.returncode == 130
    run_to_end(study, out)
    assert result_bytes(study.parent / out) == undisturbed


def kept_progress(study: Path, folder: Path) -> list[Path]:
    """A plan swept to its end with its progress kept, as after a crash while the result is made."""
    with open_checkpoint(make_plan(Study.load(study)), folder, tell=str) as progress:
        progress._every = 0.0
        audit(make_plan(Study.load(study)), checkpoint=progress)
    return sorted(folder.glob("fold-*.npz"))


def messages_of(study: Path, folder: Path, **options) -> list[str]:
    said: list[str] = []
    plan = make_plan(Study.load(study))
    with open_checkpoint(plan, folder, tell=said.append, **options) as progress:
        audit(plan, checkpoint=progress)
    return said


@pytest.mark.parametrize("damage", ["truncated", "flipped", "empty"])
def test_a_damaged_progress_file_is_made_again(study, undisturbed, tmp_path, damage):
    folder = tmp_path / "progress"
    file = kept_progress(study, folder)[1]
    content = bytearray(file.read_bytes())
    if damage == "truncated":
        content = content[: len(content) // 2]
    elif damage == "flipped":
        content[len(content) // 3] ^= 0xFF
    else:
        content = bytearray()
    file.write_bytes(content)
    assert any("damaged" in text for text in messages_of(study, folder))


def test_a_changed_setting_makes_progress_unusable_and_is_named(tmp_path):
    small = write_small_study(tmp_path / "study", participants=4)
    folder = tmp_path / "progress"
    kept_progress(small.study_file, folder)
    text = small.study_file.read_text()
    for old, new, word in [
        ("count = 12", "count = 11", "placements"),
        ("drift = 1", "drift = 2", "cleaning"),
        ("folds = 4", "folds = 2", "participants and folds"),
    ]:
        small.study_file.write_text(text.replace(old, new))
        said = messages_of(small.study_file, folder)
        assert any("not used" in line and word in line for line in said), (old, said)
        small.study_file.write_text(text)
        kept_progress(small.study_file, folder)
    # a threshold changes no number of the pass
    small.study_file.write_text(text.replace("level = 0.05", "level = 0.01"))
    assert messages_of(small.study_file, folder) == ["going on from earlier progress"]
    assert any("--fresh" in line for line in messages_of(small.study_file, folder, fresh=True))


def test_a_changed_run_makes_its_fold_again(tmp_path):
    small = write_small_study(tmp_path / "study", participants=4)
    folder = tmp_path / "progress"
    kept_progress(small.study_file, folder)
    path = small.bold_files["sub-02", "1"]
    image = nib.Nifti1Image.from_filename(path)
    data = image.get_fdata()
    data[..., 0] += 50
    changed = nib.Nifti1Image(data, image.affine, image.header)
    nib.save(changed, path)
    said = messages_of(small.study_file, folder)
    assert any(path.name in line and "changed" in line for line in said)


def test_a_full_disk_stops_the_run_with_a_clear_error(study, tmp_path, monkeypatch):
    """A checkpoint that cannot be written is not silently given up."""
    folder = tmp_path / "progress"
    plan = make_plan(Study.load(study))

    def full(*_: object, **__: object) -> None:
        raise OSError(28, "No space left on device")

    with open_checkpoint(plan, folder, tell=str) as progress:
        progress._every = 0.0
        monkeypatch.setattr(checkpoint_module, "_write", full)
        with pytest.raises(DataError, match=r"progress folder.*No space left.*free some space"):
            audit(plan, checkpoint=progress)
    monkeypatch.undo()
    assert messages_of(study, folder) == []


def test_a_second_run_into_one_folder_refuses(study, tmp_path):
    plan = make_plan(Study.load(study))
    folder = tmp_path / ".audit.progress"
    with (
        open_checkpoint(plan, folder, tell=str),
        pytest.raises(StudyError, match="another run is at work"),
        open_checkpoint(plan, folder, tell=str),
    ):
        pass


def test_progress_holds_no_pickle_and_no_path(study, tmp_path):
    folder = tmp_path / "progress"
    for file in kept_progress(study, folder):
        with np.load(file, allow_pickle=False) as stored:
            assert str(study.parent) not in stored["records"].tobytes().decode()
            json.loads(stored["records"].tobytes())


def test_a_second_command_into_one_folder_refuses(study, undisturbed):
    """Two processes: the second ends with code 2 and words, the first goes on undisturbed."""
    out = "taken"
    first = start(study, out)
    wait_for_progress(study, out, first)
    first.send_signal(signal.SIGSTOP)  # so that it is still at work when the second comes
    second = start(study, out)
    told, messages = second.communicate(timeout=60)
    first.send_signal(signal.SIGCONT)
    assert (second.returncode, told) == (2, "")
    assert "another run is at work on this output" in messages
    assert "one run at a time" in messages
    _, messages = first.communicate(timeout=60)
    assert first.returncode == 0, messages
    assert result_bytes(study.parent / out) == undisturbed
