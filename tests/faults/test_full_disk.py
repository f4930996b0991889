"""A disk that is full, in whatever place it shows: a clear error, nothing half written, no loss."""

from __future__ import annotations

import errno
import os
import resource
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import jinja2
import nibabel as nib
import pandas as pd
import pytest

from seedaudit import store
from seedaudit.cli import main
from seedaudit.errors import DataError, StudyError
from seedaudit.forecast import Forecast, strains
from seedaudit.sweep import checkpoint as checkpoint_module

ROOT = Path(__file__).resolve().parents[2]


def full(*_: object, **__: object) -> None:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


@pytest.fixture
def keep_progress_at_once(monkeypatch):
    defaults = checkpoint_module.Checkpoint.__init__.__kwdefaults__
    monkeypatch.setitem(defaults, "every", 0.0)


WRITES = {
    "maps": (nib, "save"),
    "tables": (pd.DataFrame, "to_csv"),
    "texts": (Path, "write_text"),
    "the folder": (store.tempfile, "mkdtemp"),
    "the last step": (store, "_put"),
}


@pytest.mark.parametrize("what", WRITES)
def test_no_space_for_the_result(what, folder, no_figures, keep_progress_at_once, monkeypatch,
                                 capsys):  # fmt: skip
    """Nothing of the result is left, its progress is; the same command goes on from it."""
    with monkeypatch.context() as broken:
        broken.setattr(*WRITES[what], full)
        assert main(["run", "study.toml"]) == 3
    told = capsys.readouterr().err
    assert "output audit: cannot be written (No space left on device)" in told
    assert "enough space" in told
    assert {path.name for path in folder.iterdir() if "audit" in path.name} == {".audit.progress"}
    assert main(["run", "study.toml"]) == 0
    assert "going on from earlier progress" in capsys.readouterr().err
    assert {path.name for path in folder.iterdir() if "audit" in path.name} == {"audit"}


def test_no_space_for_the_report(folder, monkeypatch, capsys):
    monkeypatch.setattr("seedaudit.report.write_report", full)
    assert main(["run", "study.toml"]) == 3
    assert "No space left" in capsys.readouterr().err
    assert not (folder / "audit").exists()


def test_no_space_for_the_progress(folder, no_figures, keep_progress_at_once, monkeypatch, capsys):
    monkeypatch.setattr(checkpoint_module, "_write", full)
    assert main(["run", "study.toml"]) == 3
    told = capsys.readouterr().err
    assert "progress folder .audit.progress: cannot be written (No space left on device)" in told
    assert "say the same command again" in told
    assert not (folder / "audit").exists()


def test_no_space_for_the_key_of_the_progress(folder, no_figures, monkeypatch, capsys):
    monkeypatch.setattr(checkpoint_module, "_write_whole", full)
    assert main(["run", "study.toml"]) == 3
    assert "progress folder .audit.progress: cannot be written" in capsys.readouterr().err


def test_a_missing_template_is_no_matter_of_the_disk(folder, monkeypatch, capsys):
    """jinja2 calls it an OSError; advice about disk space would mislead."""

    def missing(*_: object) -> None:
        raise jinja2.TemplateNotFound("explorer.html.jinja")

    monkeypatch.setattr("seedaudit.report.write_report", missing)
    assert main(["run", "study.toml"]) == 1
    told = capsys.readouterr().err
    assert "TemplateNotFound: explorer.html.jinja" in told
    assert "space" not in told
    assert not (folder / "audit").exists()


def run_within(limit: int, folder: Path) -> subprocess.CompletedProcess[str]:
    """A whole run, figures included, whose files cannot grow beyond a limit, as under a quota."""
    return subprocess.run(
        [sys.executable, "-c", "import sys; from seedaudit.cli import main; sys.exit(main())",
         "run", "study.toml", "--workers", "1"],
        cwd=folder, capture_output=True, text=True, timeout=120,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit)),
    )  # fmt: skip


@pytest.mark.parametrize("limit", [2_000, 60_000])
def test_a_real_limit_of_the_system(limit, folder):
    """RLIMIT_FSIZE lets the write call itself fail (EFBIG), in whatever library makes it.

    2 kB stop the progress or the first map, 60 kB the figure.
    """
    ended = run_within(limit, folder)
    assert ended.returncode == 3, ended.stderr
    assert "cannot be written" in ended.stderr
    assert "Traceback" not in ended.stderr
    assert not (folder / "audit").exists()
    assert not list(folder.glob(".audit-*"))


@pytest.fixture
def small_disk(tmp_path) -> Iterator[Path]:
    """A file system of 1 MB."""
    place = tmp_path / "disk"
    place.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(place)]
    try:
        mounted = subprocess.run(command, capture_output=True, timeout=20)
    except (OSError, subprocess.TimeoutExpired) as error:
        pytest.skip(f"mount cannot be called: {error}")
    if mounted.returncode:
        pytest.skip(f"mounting is not permitted: {mounted.stderr.decode().strip()}")
    yield place
    subprocess.run(["umount", str(place)], check=True, timeout=20)


def test_a_disk_of_one_megabyte(small_disk, folder, monkeypatch, capsys):
    """Told before the work; and where the forecast errs, by the write itself."""
    out = small_disk / "audit"
    assert main(["run", "study.toml", "--out", str(out)]) == 2
    told = capsys.readouterr().err
    assert "are needed (result and progress), 1.0 MB are free" in told
    assert list(small_disk.iterdir()) == []
    monkeypatch.setattr("seedaudit.forecast.strains", lambda needs, output: [])
    (small_disk / "others").write_bytes(bytes(900_000))
    assert main(["run", "study.toml", "--out", str(out), "--quiet"]) == 3
    told = capsys.readouterr().err
    assert "cannot be written" in told
    assert "Traceback" not in told
    assert not out.exists()
    assert not list(small_disk.glob(".audit-*"))


def test_needs_against_the_machine(tmp_path):
    """Disk: an error when it cannot fit. Memory: a warning, since the forecast is rough."""
    assert strains(Forecast(1, 1e6, 1e6, 1e6), tmp_path / "new" / "audit") == []
    with pytest.raises(StudyError, match=r"about 1000000000\.0 GB are needed .*--out"):
        strains(Forecast(1, 1e6, 1e18), tmp_path / "audit")
    with pytest.raises(StudyError, match="are free"):
        strains(Forecast(1, 1e6, 1e6, 1e18), tmp_path / "audit")
    (warning,) = strains(Forecast(1, 1e18, 1e6), tmp_path / "audit")
    assert "about 1000000000.0 GB of memory will be needed" in warning
    assert "--workers" in warning


def test_a_short_memory_is_warned_of_and_recorded(folder, no_figures, monkeypatch, capsys):
    class Machine:
        available = 1e6
        total = 1e12

    monkeypatch.setattr("seedaudit.forecast.psutil.virtual_memory", Machine)
    assert main(["check", "study.toml"]) == 0
    assert "GB of memory will be needed, 1.0 MB are free" in capsys.readouterr().err
    assert main(["run", "study.toml", "--quiet"]) == 0
    kept = store.load_audit(folder / "audit").provenance["warnings"]
    assert any("of memory will be needed" in text for text in kept)


def test_a_result_that_cannot_fit_is_told_by_check_too(folder, capsys, monkeypatch):
    class Disk:
        free = 1000

    monkeypatch.setattr("seedaudit.forecast.shutil.disk_usage", lambda path: Disk)
    assert main(["check", "study.toml"]) == 2
    assert "0.0 MB are free" in capsys.readouterr().err


def test_too_little_memory_is_told_as_that(folder, monkeypatch, capsys):
    def hungry(*_: object, **__: object) -> None:
        raise MemoryError

    monkeypatch.setattr("seedaudit.auditing.sweep", hungry)
    assert main(["run", "study.toml"]) == 1
    told = capsys.readouterr().err
    assert "memory of the machine does not suffice" in told
    assert not list(folder.glob("seedaudit-fault-*"))


def test_the_folder_is_removed_where_the_disk_is_full(result, tmp_path, monkeypatch):
    monkeypatch.setattr(store, "write_table", full)
    with pytest.raises(DataError, match="No space left"):
        store.save(result, tmp_path / "deep" / "audit")
    assert list((tmp_path / "deep").iterdir()) == []
