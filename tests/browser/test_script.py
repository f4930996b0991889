"""The scripts of the page keep to the rules of eslint.config.mjs; ESLint comes from npm."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

from seedaudit.report.explorer import page_script
from tests.browser.conftest import missing

RULES = Path(__file__).with_name("eslint.config.mjs")
PACKAGES = ["eslint@9.39.1", "@eslint/js@9.39.1"]


def test_scripts_keep_to_the_rules(pytestconfig):
    npm, node = shutil.which("npm"), shutil.which("node")
    if npm is None or node is None:
        missing("no npm to fetch eslint with")
    folder = pytestconfig.cache.mkdir("eslint")
    linter = folder / "node_modules" / "eslint" / "bin" / "eslint.js"
    if not linter.exists():
        command = [npm, "install", "--no-save", "--silent", "--prefix", str(folder), *PACKAGES]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        if done.returncode:
            missing(f"npm install {PACKAGES[0]}: {done.stderr.strip()[-200:]}")
    (folder / RULES.name).write_bytes(RULES.read_bytes())
    (folder / "explorer.js").write_text(page_script(), encoding="utf-8")
    found = subprocess.run(
        [node, str(linter), "explorer.js"], cwd=folder, capture_output=True, text=True, check=False
    )
    assert found.returncode == 0, found.stdout + found.stderr
