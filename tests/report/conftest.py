"""One browser for all tests of the page, and the accessibility checker."""

import importlib.util
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest


def _load(name):
    # import-mode importlib: neighbours are loaded by path
    spec = importlib.util.spec_from_file_location(f"report_{name}", Path(__file__).with_name(f"{name}.py"))
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def browser():
    browser = _load("browser").make_browser()
    yield browser
    browser.close()


@pytest.fixture(scope="session")
def axe(request):
    """Source of axe-core, from $AXE_CORE or the npm registry; kept in pytest's cache, never in the repository."""
    named = os.environ.get("AXE_CORE")
    if named:
        return Path(named).read_text(encoding="utf-8")
    folder = request.config.cache.mkdir("axe")
    source = folder / "node_modules" / "axe-core" / "axe.min.js"
    if not source.exists():
        npm = shutil.which("npm")
        if npm is None:
            pytest.skip("no npm here to fetch axe-core; set AXE_CORE to an axe.min.js")
        got = subprocess.run(
            [npm, "install", "--no-save", "--no-audit", "--no-fund", "--prefix", str(folder), "axe-core@4"],
            capture_output=True, text=True, timeout=120, check=False,
        )  # fmt: skip
        if got.returncode or not source.exists():
            pytest.skip(f"axe-core could not be fetched: {got.stderr.strip()[-200:]}")
    return source.read_text(encoding="utf-8")
