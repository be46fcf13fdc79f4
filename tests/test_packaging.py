"""The wheel: built, installed into an environment that cannot see this working copy, and run through the whole demo."""

import os
import re
import subprocess
import sys
import sysconfig
import urllib.request
import venv
import zipfile
from pathlib import Path

import pytest

from tilemap import __version__

ROOT = Path(__file__).parents[1]
LONG = 600  # seconds, of which building takes about 10 and the small demo about 20


def run(*arguments, **options):
    ran = subprocess.run(list(map(str, arguments)), capture_output=True, text=True, timeout=LONG, **options)
    assert ran.returncode == 0, ran.stdout + ran.stderr
    return ran.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    out = tmp_path_factory.mktemp("wheel")
    run(sys.executable, "-m", "build", "--wheel", "--outdir", out, ROOT)
    return next(out.glob("*.whl"))


@pytest.fixture(scope="module")
def installed(wheel, tmp_path_factory):
    """The commands of an environment that holds the wheel, and the libraries already here but not this project.

    A .pth line adds a folder to the path without reading the .pth files in it, so the editable install of this working
    copy, which is such a file, stays out of sight.
    """
    folder = tmp_path_factory.mktemp("installed")
    venv.create(folder, with_pip=False, symlinks=True)
    python = folder / "bin" / "python"
    packages = Path(run(python, "-c", "import sysconfig; print(sysconfig.get_path('purelib'))").strip())
    (packages / "libraries.pth").write_text(f"{sysconfig.get_path('purelib')}\n{sysconfig.get_path('platlib')}\n")
    run(sys.executable, "-m", "pip", "--python", python, "install", "--quiet", "--no-deps", "--no-index", wheel)
    return folder / "bin"


@pytest.fixture(scope="module")
def outside(tmp_path_factory):
    """A folder to work in, and an environment with nothing that leads back here."""
    variables = {name: value for name, value in os.environ.items() if not name.startswith("PYTHON")}
    return {"cwd": tmp_path_factory.mktemp("outside"), "env": variables}


def test_the_wheel_holds_the_frame_the_pages_and_the_build_file(wheel):
    held = set(zipfile.ZipFile(wheel).namelist())
    frame = {
        f"tilemap/static/{path.relative_to(ROOT / 'static')}" for path in (ROOT / "static").rglob("*") if path.is_file()
    }
    package = {
        str(path.relative_to(ROOT))
        for path in (ROOT / "tilemap").rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert frame | package | {"tilemap/demo/marram.yaml"} <= held


def test_the_wheel_holds_nothing_else(wheel):
    tops = {name.split("/")[0] for name in zipfile.ZipFile(wheel).namelist()}
    assert tops == {"tilemap", f"tilemap-{__version__}.dist-info"}


def test_the_installed_package_is_the_wheels(installed, outside):
    found = run(installed / "python", "-c", "import tilemap; print(tilemap.__file__)", **outside)
    assert Path(found.strip()).is_relative_to(installed.parent)


def test_the_demo_runs_and_its_atlas_is_served_with_the_frame(installed, outside):
    run(installed / "tilemap", "demo", "marram", "--no-serve", "--scale", "0.02", **outside)
    server = subprocess.Popen(
        [installed / "tilemap", "demo", "marram", "--scale", "0.02", "--port", "0"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        **outside,
    )
    try:
        said = next((line for line in server.stdout if "http://" in line), None)
        assert said is not None, server.stderr.read()
        address = re.search(r"http://\S+/", said)[0]
        for below, here in (("", "index.html"), ("frame/app.js", "app.js"), ("frame/frame.css", "frame.css")):
            with urllib.request.urlopen(f"{address}marram/{below}", timeout=LONG) as response:
                assert response.read() == (ROOT / "static" / here).read_bytes()
        with urllib.request.urlopen(f"{address}marram/picture.png", timeout=LONG) as response:
            assert response.read(8) == b"\x89PNG\r\n\x1a\n"
    finally:
        server.terminate()
        server.communicate(timeout=LONG)
