"""The commands: exit codes, one line for whatever goes wrong, and progress for people and for logs."""

import errno
import io
import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace

import pytest
from atlas_maker import make_atlas

from tilemap import __version__
from tilemap.cli import main
from tilemap.errors import InputError, NotSoError
from tilemap.progress import shown
from tilemap.sizes import byte_count

RUN32 = Path(__file__).parent / "data" / "run32"


def one_line(capsys):
    """What was said on stderr, which has to be one line in tilemap's name."""
    said = capsys.readouterr().err.lstrip("\n")  # click ends the line of a ^C
    assert said.startswith("tilemap: ") and said.count("\n") == 1
    return said


@pytest.fixture
def building(monkeypatch):
    """Puts a function in the place of the build."""

    def put(function):
        monkeypatch.setitem(sys.modules, "tilemap.build_atlas", SimpleNamespace(build_atlas=function))

    return put


def raising(error):
    def build_atlas(*_, **__):
        raise error

    return build_atlas


def test_the_version_is_the_packages(capsys):
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"tilemap {__version__}\n"


@pytest.mark.parametrize("arguments", [[], ["--help"], ["-h"]])
def test_help_names_every_command(capsys, arguments):
    assert main(arguments) == 0
    said = capsys.readouterr().out
    assert all(command in said for command in ("probe", "build", "verify", "serve", "demo"))


def test_help_does_not_wait_for_the_engine():
    code = "import sys, tilemap.cli; sys.exit(tilemap.cli.main(['--help']) or 'numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], stdout=subprocess.DEVNULL, timeout=60).returncode == 0


@pytest.mark.parametrize(
    "arguments",
    [
        ["bild"],
        ["build"],
        ["build", "a.yaml"],
        ["build", "a.yaml", "--out", "b", "--workers", "0"],
        ["build", "a.yaml", "--out", "b", "--memory", "lots"],
        ["build", "nowhere.yaml", "--out", "b"],
        ["serve"],
        ["serve", "nowhere.atlas"],
        ["serve", "nowhere.atlas", "--port", "70000"],
        ["verify"],
        ["probe"],
        ["probe", "nowhere.hdf5"],
        ["demo", "--scale", "0"],
        ["demo", "--colour"],
    ],
)
def test_wrong_input_is_one_line_and_code_2(capsys, tmp_path, monkeypatch, arguments):
    monkeypatch.chdir(tmp_path)
    assert main(arguments) == 2
    one_line(capsys)
    assert list(tmp_path.iterdir()) == []


def test_a_build_passes_on_what_was_asked_for(capsys, building):
    asked = {}

    def build_atlas(build_file, out, workers, memory, progress):
        asked.update(build_file=build_file, out=out, workers=workers, memory=memory)
        progress("drawing gas", 0, 4)
        progress("drawing gas", 4, 4)
        return out

    building(build_atlas)
    assert main(["build", "a.yaml", "--out", "b.atlas", "--memory", "1.5GiB", "--workers", "2"]) == 0
    assert asked == {"build_file": Path("a.yaml"), "out": Path("b.atlas"), "workers": 2, "memory": 3 * 2**29}
    assert "b.atlas" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("error", "code", "said"),
    [
        (InputError("the box\nis empty"), 2, "the box is empty"),
        (NotSoError("level 3 is not the average of level 2"), 1, "level 3"),
        (OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), "scratch/7"), 2, "scratch/7: the disk is full"),
        (OSError("Can't write data (No space left on device)"), 2, "the disk is full"),
        (PermissionError(errno.EACCES, os.strerror(errno.EACCES), "out"), 2, "out: Permission denied"),
        (MemoryError(), 2, "--memory"),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
)
def test_each_kind_of_failure_has_its_code(capsys, building, error, code, said):
    building(raising(error))
    assert main(["build", "a.yaml", "--out", "b"]) == code
    assert said in one_line(capsys)


def test_a_full_disk_under_the_output_is_one_line():
    with open("/dev/full", "w") as full:  # the kernel's own disk that is always full: full(4)
        ran = subprocess.run(
            [sys.executable, "-m", "tilemap", "probe", str(RUN32 / "run.0.hdf5")],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            timeout=120,
        )
    assert (ran.returncode, ran.stderr) == (2, "tilemap: the disk is full: make room and start again\n")


def test_a_reader_that_goes_away_is_no_reason_to_shout():
    script = f"{sys.executable} -m tilemap probe {RUN32}/run.0.hdf5 | true"
    ran = subprocess.run(["sh", "-c", script], stderr=subprocess.PIPE, text=True, timeout=120)
    assert ran.stderr == ""


def test_probe_says_what_is_in_the_files(capsys):
    assert main(["probe", str(RUN32 / "run.0.hdf5"), str(RUN32 / "run.1.hdf5")]) == 0
    assert "PartType0" in capsys.readouterr().out


def test_probe_drafts_a_build_file_once(capsys, tmp_path):
    draft = tmp_path / "run32.yaml"
    assert main(["probe", str(RUN32 / "run.0.hdf5"), "--write", str(draft)]) == 0
    written = draft.read_text()
    assert "PartType0" in written
    capsys.readouterr()
    assert main(["probe", str(RUN32 / "run.0.hdf5"), "--write", str(draft)]) == 2
    assert "is there already" in one_line(capsys)
    assert draft.read_text() == written


def test_verify_finds_nothing_in_a_whole_atlas(capsys, tmp_path):
    atlas = make_atlas(tmp_path / "a.atlas", columns=512, rows=512, slabs=1)
    assert main(["verify", str(atlas)]) == 0
    assert "nothing is off" in capsys.readouterr().out


def test_verify_names_what_is_off_and_gives_code_1(capsys, tmp_path):
    atlas = make_atlas(tmp_path / "a.atlas", columns=512, rows=512, slabs=1)
    shard = atlas / "z0.50" / "gas" / "0" / "c" / "0" / "0" / "0"
    data = bytearray(shard.read_bytes())
    data[1000] ^= 1
    shard.write_bytes(data)
    assert main(["verify", str(atlas)]) == 1
    said = capsys.readouterr()
    assert "z0.50/gas/0" in said.out
    assert said.err.splitlines()[-1] == f"tilemap: {atlas}: 1 thing is off"


@pytest.mark.parametrize(
    ("text", "count"),
    [("4GiB", 2**32), ("500MB", 5 * 10**8), ("1.5e9", 1_500_000_000), (" 2 kB", None), ("2 KB", 2000)],
)
def test_sizes_are_read_as_the_standard_prefixes_say(text, count):
    # IEC 80000-13: Ki, Mi, Gi are powers of 1024, and k, M, G powers of 1000 (K for k is common practice).
    if count is None:
        with pytest.raises(InputError, match="expected a size"):
            byte_count(text)
    else:
        assert byte_count(text) == count


@pytest.mark.parametrize("text", ["", "0", "-1GiB", "GiB", "1.2.3GB", "4 gigs", "nan"])
def test_what_is_no_size_is_refused(text):
    with pytest.raises(InputError):
        byte_count(text)


def test_a_log_gets_one_line_at_each_end_of_a_phase():
    log = io.StringIO()
    with shown(log) as report:
        for done in range(5):
            report("reading", done, 4)
        report("reading", 4, 4)
        report("drawing", 0, 10)
    lines = log.getvalue().splitlines()
    assert [line.split(":")[0] for line in lines] == ["reading ...", "reading", "drawing ..."]


def test_a_terminal_gets_a_bar_with_the_time_left():
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    terminal = Terminal()
    with shown(terminal) as report:
        report("drawing [gas]", 1, 4)
        report("drawing [gas]", 4, 4)
    assert "drawing [gas]" in terminal.getvalue() and "100%" in terminal.getvalue()
