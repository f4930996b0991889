"""Nothing leaks: no network, no place, no name; and nothing in a result runs when it is opened."""

from __future__ import annotations

import ast
import gzip
import json
import os
import re
import shutil
import socket
import stat
import zlib
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest

import seedaudit
from seedaudit.cli import main
from seedaudit.errors import StudyError
from seedaudit.inputs.design import build_design
from seedaudit.provenance import file_name, shortened
from seedaudit.store import load_audit
from tests.breaks import bold, both, confounds, put, swap, table

PACKAGE = Path(seedaudit.__file__).parent
SECRET = "alices-secret-disk"
"""A folder that no file of a result may name."""


@pytest.fixture
def no_network(monkeypatch):
    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("the network was asked for")

    class Blocked(socket.socket):
        __init__ = refuse

    monkeypatch.setattr(socket, "socket", Blocked)
    for name in ("create_connection", "getaddrinfo", "gethostbyname", "gethostname", "getfqdn"):
        monkeypatch.setattr(socket, name, refuse)


def test_a_whole_audit_without_a_network(folder, no_network):
    """Figures, report and the published coordinates included."""
    with pytest.raises(AssertionError, match="network"):
        socket.create_connection(("127.0.0.1", 9))
    swap(('regions = "networks_dseg.nii.gz"', 'regions = "dosenbach2010"'))(folder)
    assert main(["run", "study.toml", "--quiet"]) == 0
    assert (folder / "audit" / "report.html").is_file()
    assert load_audit(folder / "audit").regions["region"].str.len().gt(0).all()


def test_the_report_asks_no_network_either(result, tmp_path):
    """No address in any place from which a browser fetches."""
    text = (result.save(tmp_path / "audit") / "report.html").read_text(encoding="utf-8")
    fetched: list[str] = []

    class Finder(HTMLParser):
        def handle_starttag(self, tag, attrs):
            names = ("src", "srcset", "action", "data", "poster", "background")
            kept = [v for k, v in attrs if k in names or (k == "href" and tag in ("link", "base"))]
            fetched.extend(value for value in kept if value)

    Finder().feed(text)
    assert all(value.startswith("data:") for value in fetched)
    assert not re.search(r"url\((?!['\"]?(data:|#))", text)
    assert not re.search(
        r"@import|\bfetch\(|XMLHttpRequest|WebSocket|sendBeacon|importScripts", text
    )


def readable_bytes(folder: Path) -> dict[str, bytes]:
    """Every file of a result as its readers see it: gzip and the streams of a PDF unpacked."""
    contents = {}
    for path in folder.rglob("*"):
        if path.is_file():
            content = path.read_bytes()
            if path.suffix == ".gz":
                content = gzip.decompress(content) + content[:64]
            for stream in re.findall(rb"stream\r?\n(.*?)endstream", content, re.S):
                try:
                    content += zlib.decompress(stream)
                except zlib.error:
                    continue
            contents[str(path.relative_to(folder))] = content
    return contents


def test_no_file_names_a_place(sound, tmp_path, monkeypatch):
    """Absolute paths, paths from a home, and paths that climb: none is in any file of the result.

    One participant is set aside, so that a reason is kept; the confounds are the odd one out.
    """
    home = tmp_path / SECRET
    shutil.copytree(sound, home / "study")
    (home / "else").mkdir()
    monkeypatch.setenv("HOME", str(home))
    folder = home / "study"
    monkeypatch.chdir(folder)
    shutil.move(folder / "mask.nii.gz", home / "else" / "mask.nii.gz")
    for number in (1, 2, 3):
        shutil.move(confounds(folder, number), home / "else")
    rename = {
        '"mask.nii.gz"': f'"../../{SECRET}/else/mask.nii.gz"',
        '"networks_dseg.nii.gz"': f'"{folder}/networks_dseg.nii.gz"',
        '"participants.tsv"': '"~/study/participants.tsv"',
        '"runs.tsv"': '"~/study/runs.tsv"',
        '"audit"': f'"{home}/audit"',
    }
    swap(*rename.items())(folder)

    def elsewhere(rows: list[list[str]]) -> None:
        for row in rows[1:4]:
            row[3] = str(home / "else" / row[3])
        rows[1][2] = "~/study/" + rows[1][2]

    both(table("runs.tsv", elsewhere), put("data", 'on_bad_run = "set-aside"'))(folder)
    bold(folder, 4).write_bytes(bold(folder, 4).read_bytes()[:-3000])
    assert main(["run", "study.toml", "--quiet"]) == 4
    for name, content in readable_bytes(home / "audit").items():
        for word in (SECRET, str(tmp_path), os.path.expanduser("~root")):
            assert word.encode() not in content or word == "/", f"{word} in {name}"
    study = load_audit(home / "audit").provenance["study"]
    assert study["data"]["mask"] == "mask.nii.gz"
    assert study["data"]["runs"] == "runs.tsv"
    assert study["group"]["table"] == "participants.tsv"
    assert study["output"] == "audit"


@pytest.mark.parametrize(
    ("typed", "kept"),
    [
        ("/srv/cohort/mask.nii.gz", "mask.nii.gz"),
        ("~/mask.nii.gz", "mask.nii.gz"),
        ("~alice/mask.nii.gz", "mask.nii.gz"),
        ("../alice/mask.nii.gz", "mask.nii.gz"),
        ("data/../../alice/mask.nii.gz", "mask.nii.gz"),
        (r"C:\Users\alice\mask.nii.gz", "mask.nii.gz"),
        (r"\\server\alice\mask.nii.gz", "mask.nii.gz"),
        ("data/mask.nii.gz", "data/mask.nii.gz"),
        ("/data/alice/sub-*_bold.nii.gz", "sub-*_bold.nii.gz"),
        ("~ arm + age", "~ arm + age"),
        ("~ a/b", "~ a/b"),
        ("~a+b:c", "~a+b:c"),
        ("dosenbach2010", "dosenbach2010"),
    ],
)
def test_what_is_kept_of_a_path(typed, kept):
    assert file_name(typed) == kept
    assert shortened({"a": [typed, 1.5, {"b": typed}]}) == {"a": [kept, 1.5, {"b": kept}]}


ODD_NAMES = [
    "sub-01 (copy)", "=1+1", "=cmd|' C calc'!A0", "<script>alert(1)<script>", "a;rm -rf",
    "x\x1b[31mred", "a\nb", "\u202egnp", "sub-übung", "-rf", "$(id)", "a&b'\"c", "@tom", "\t=2",
]  # fmt: skip


def test_participants_of_any_name(sound, tmp_path, capsys, monkeypatch):
    """File names may hold anything but / and zero; some are not even text.

    Labels stay what they are in `load_audit`, and no message carries an order to the terminal.
    """
    monkeypatch.chdir(tmp_path)
    folder = tmp_path / "odd"
    folder.mkdir()
    shutil.copy(sound / "mask.nii.gz", folder)
    names = [os.fsencode(name) for name in ODD_NAMES] + [b"sub-\xff\xfe"]
    source = (sound / "sub-01_task-rest_run-1_bold.nii.gz").read_bytes()
    content = bytearray(gzip.decompress(source))
    rng = np.random.default_rng(3)
    for name in names:
        # each run differs: a copy under two names would be refused
        content[-4000:] = rng.integers(0, 60, 4000, np.uint8).tobytes()
        (Path(os.fsdecode(os.fsencode(folder) + b"/" + name + b"_bold.nii.gz"))).write_bytes(
            gzip.compress(bytes(content), 1)
        )
    command = [
        "--seed",
        "-7",
        "-48",
        "20",
        "--space",
        "native",
        "--radius",
        "5",
        "--within",
        "5",
        "--count",
        "4",
        "--bold",
        "odd/*_bold.nii.gz",
        "--mask",
        "odd/mask.nii.gz",
    ]
    assert main(["check", *command, "--json"]) == 0
    assert len(json.loads(capsys.readouterr().out)["runs"]) == len(names)
    assert main(["check", *command]) == 0
    shown = capsys.readouterr()
    assert main(["run", *command]) == 0
    ran = capsys.readouterr()
    for text in (shown.out, shown.err, ran.out, ran.err):
        assert "\x1b" not in text
        assert "\u202e" not in text
        assert not re.search(r"[\ud800-\udfff]", text)
    people = load_audit("audit").table("participants")["participant_id"].tolist()
    assert len(people) == len(names)
    assert {"=cmd|' C calc'!A0", "<script>alert(1)<script>", "-rf", "x\x1b[31mred"} <= set(people)
    lines = Path("audit/tables/participants.tsv").read_text(encoding="utf-8").splitlines()
    assert len(lines) == len(names) + 1
    assert not [line for line in lines if line[0] in "=+-@"]
    report = Path("audit/report.html").read_text(encoding="utf-8")
    for name in ("sub-01 (copy)", "alert(1)", "calc", "übung"):
        assert name not in report


def test_names_in_the_report_cannot_run(folder):
    """Regions, claims, title: HTML, an end of the script, a template, a formula."""
    evil = "</script><script>alert(7)</script>"

    def names(rows: list[list[str]]) -> None:
        for row, name in zip(rows[1:], (evil, "{{ 7*7 }}", "=1+1", "<img src=x onerror=y>"),
                             strict=False):  # fmt: skip
            row[1] = name

    both(
        table("networks_dseg.tsv", names),
        swap(('title = "Small synthetic study"', f'title = "{evil}{{{{ 7*7 }}}}"')),
    )(folder)
    assert main(["run", "study.toml", "--quiet"]) == 0
    report = (folder / "audit" / "report.html").read_text(encoding="utf-8")
    assert evil not in report
    assert "<script>alert" not in report
    assert "<img src=x" not in report
    tags: list[str] = []

    class Finder(HTMLParser):
        def handle_starttag(self, tag, attrs):
            tags.append(tag)
            assert not [k for k, _ in attrs if k.startswith("on")]

    Finder().feed(report)
    assert report.lower().count("</script") == tags.count("script")
    regions = load_audit(folder / "audit").regions["region"].tolist()
    assert regions[:3] == [evil, "{{ 7*7 }}", "=1+1"]
    cells = (folder / "audit" / "tables" / "regions.tsv").read_text().split("\t")
    assert "'=1+1" in cells
    for text in ("methods.md", "figure_caption.md"):
        assert "<script>" not in (folder / "audit" / text).read_text(encoding="utf-8"), text


@pytest.mark.parametrize(
    "model",
    [
        "~ {__import__('os').system('touch ran')}",
        "~ `__import__('os').system('touch ran')`",
        "~ I(__import__('os').system('touch ran'))",
        "~ C(__import__('os').system('touch ran'))",
        "~ open('ran', 'w')",
        "~ Q('age')",
        "~ bs(age, df=4)",
        "~ poly(age, 2)",
        "~ age.__class__",
        "~ age[0]",
        "~ 'text'",
        "~ lag(age)",
        "arm ~ age",
        "~ (lambda: 1)()",
        "~ age | arm",
        "[age ~ arm] ~ 1",
        "~ age ** 99999999",
    ],
)
def test_text_of_a_model_is_never_run(model, sound, tmp_path, monkeypatch):
    """Only the safe notation reaches the library that would evaluate calls."""
    monkeypatch.chdir(tmp_path)
    people = [f"sub-0{number}" for number in (1, 2, 3, 4)]
    with pytest.raises(StudyError, match="model"):
        build_design(people, sound / "participants.tsv", model, "age")
    assert list(tmp_path.iterdir()) == []


def test_the_source_holds_no_way_to_run_data():
    """No pickle on disk and no evaluation of text, anywhere in the package."""
    modules = {"pickle", "marshal", "shelve", "dill", "cloudpickle", "code", "codeop",
               "urllib.request", "requests", "http", "ftplib", "socket", "subprocess"}  # fmt: skip
    calls = {"eval", "exec", "compile", "__import__", "system", "popen", "load_pickle"}
    for path in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Import):
                named = {alias.name for alias in node.names}
            elif isinstance(node, ast.ImportFrom):
                named = {node.module or ""} | {f"{node.module}.{a.name}" for a in node.names}
            elif isinstance(node, ast.Call):
                called = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(
                    node.func, "id", "")  # fmt: skip
                own = isinstance(node.func, ast.Attribute) and called == "compile"
                assert own or called not in calls, f"{path.name}:{node.lineno} {called}"
                assert not [k for k in node.keywords if k.arg == "allow_pickle" and getattr(
                    k.value, "value", True)], f"{path.name}:{node.lineno}"  # fmt: skip
                continue
            else:
                continue
            assert not named & modules, f"{path.name}:{node.lineno} {named & modules}"


def test_no_array_on_disk_is_pickled(result, tmp_path):
    for name, content in readable_bytes(result.save(tmp_path / "audit")).items():
        assert not content.startswith((b"\x80\x03", b"\x80\x04", b"\x80\x05")), name


@pytest.mark.parametrize("mask", [0o022, 0o027, 0o077])
def test_everything_follows_the_umask(mask, folder):
    """Files and folders of the result, whatever wrote them."""
    old = os.umask(mask)
    try:
        assert main(["run", "study.toml", "--quiet"]) == 0
    finally:
        os.umask(old)
    paths = [folder / "audit", *(folder / "audit").rglob("*")]
    assert len(paths) > 40
    for path in paths:
        whole = 0o777 if path.is_dir() else 0o666
        assert stat.S_IMODE(path.stat().st_mode) == whole & ~mask, path.name
