"""The scripts of a working copy: what they say when the system lacks something, and that they say it at once."""

import os
import shutil
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGES = "apt-get install -y python3 python3-venv"


@pytest.fixture
def copy(tmp_path):
    """A working copy with no environment, and a folder of commands that holds the usual small ones and no Python."""
    for name in ("builds", "tests"):
        (tmp_path / name).mkdir()
    for name in ("builds/demo", "builds/environment.sh", "tests/all", "pyproject.toml"):
        shutil.copy(ROOT / name, tmp_path / name)
    commands = tmp_path / "commands"
    commands.mkdir()
    for name in ("sh", "dirname", "cksum", "grep", "id", "cat"):
        (commands / name).symlink_to(shutil.which(name))
    return tmp_path


def run(copy, script):
    environment = {"PATH": str(copy / "commands"), "HOME": str(copy), "LANG": "C.UTF-8", "CI": "true"}
    return subprocess.run(
        ["sh", script], cwd=copy, env=environment, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=60
    )


@pytest.mark.parametrize("script", ["builds/demo", "tests/all"])
def test_without_python_the_line_that_installs_it_is_named(copy, script):
    ran = run(copy, script)
    assert (ran.returncode, ran.stdout) == (2, "")
    assert PACKAGES in ran.stderr and "Python 3.11 or newer is missing" in ran.stderr


@pytest.mark.parametrize("script", ["builds/demo", "tests/all"])
def test_without_venv_the_line_that_installs_it_is_named(copy, script):
    # A stand-in for a Python without its venv package: everything works but importing ensurepip.
    python = copy / "commands" / "python3"
    python.write_text('#!/bin/sh\ncase "$2" in *ensurepip*) exit 1 ;; esac\necho "(3, 11, 2)"\n')
    python.chmod(0o755)
    ran = run(copy, script)
    assert ran.returncode == 2
    assert PACKAGES in ran.stderr and "venv module of Python is missing" in ran.stderr
    assert not (copy / ".venv").exists()


def test_too_old_a_python_is_as_good_as_none(copy):
    python = copy / "commands" / "python3"
    python.write_text("#!/bin/sh\nexit 1\n")
    python.chmod(0o755)
    assert "Python 3.11 or newer is missing" in run(copy, "builds/demo").stderr


@pytest.mark.parametrize("script", ["builds/demo", "tests/all", ".ci/run"])
def test_scripts_can_be_run_as_they_are(script):
    assert os.access(ROOT / script, os.X_OK)
    assert subprocess.run(["sh", "-n", str(ROOT / script)], timeout=60).returncode == 0
