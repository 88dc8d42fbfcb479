"""The README is true: its scripts run as pasted, one after the other, and its commands are those of the checks."""

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

import bandratio as br

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text() if (ROOT / "README.md").exists() else ""


def test_scripts_run_as_pasted(tmp_path):
    scripts = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    assert scripts
    for script in scripts:
        answer = subprocess.run(
            [sys.executable, "-W", "error::DeprecationWarning:__main__", "-c", script],
            capture_output=True, text=True, cwd=tmp_path, check=False,
        )  # fmt: skip
        assert answer.returncode == 0, f"{script}\n{answer.stderr}"


def test_the_commands_run_on_the_demo(tmp_path):
    """Each line of the command line section, on a small demo scene."""
    blocks = re.findall(r"```sh\n(.*?)```", README, re.DOTALL)
    lines = [line for block in blocks for line in block.splitlines() if line.startswith("bandratio ")]
    assert len(lines) >= 5
    for line in ["bandratio demo corvane --side 160", *lines]:
        words = [sys.executable, "-m", *shlex.split(line)]
        answer = subprocess.run(words, capture_output=True, text=True, cwd=tmp_path, check=False)
        assert answer.returncode == 0, f"{line}\n{answer.stderr}{answer.stdout}"
    flags = br.open_maps(tmp_path / "flags.tif")["flag"]
    words = flags.attrs["flag_meanings"].split()
    assert (flags == words.index("bright_candidate")).sum() > 10


def test_the_test_command_is_the_one_that_the_checks_run():
    commands = re.findall(r"```sh\n(.*?)```", README, re.DOTALL)
    test_command = next(command.strip() for command in commands if "pytest" in command)
    checks = ROOT / ".ci" / "run"
    if not checks.exists():
        pytest.skip("the checks are not part of this copy")
    assert test_command in checks.read_text()


@pytest.mark.parametrize("target", re.findall(r"\]\(([^)#:]+)\)", README))
def test_links_lead_somewhere(target):
    assert (ROOT / target).exists()
