"""The commands: each parses, calls one function of a room, and reports; whatever goes wrong becomes one line.

Exit codes: 0 done, 1 the thing asked about is not so, 2 the input is wrong, 130 interrupted. Rooms are imported by the
commands that need them, so that ``tilemap --help`` answers at once.
"""

from __future__ import annotations

import errno
import json
import os
import sys
from collections.abc import Sequence
from pathlib import Path

import click

from tilemap import __version__
from tilemap.errors import InputError, NotSoError
from tilemap.progress import shown
from tilemap.sizes import byte_count

DONE, NOT_SO, WRONG_INPUT, INTERRUPTED = 0, 1, 2, 130
PORT = 8750
HOST = "127.0.0.1"
PATH = click.Path(path_type=Path)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command line and return its exit code."""
    try:
        result = commands.main(args=arguments, prog_name="tilemap", standalone_mode=False)
        sys.stdout.flush()
        return result if isinstance(result, int) else DONE
    except click.UsageError as mistake:
        hint = f" (see {mistake.ctx.command_path} --help)" if mistake.ctx else ""
        return _fail(WRONG_INPUT, mistake.format_message().rstrip(".") + hint)
    except click.ClickException as mistake:
        return _fail(WRONG_INPUT, mistake.format_message())
    except InputError as mistake:
        return _fail(WRONG_INPUT, str(mistake))
    except NotSoError as finding:
        return _fail(NOT_SO, str(finding))
    except (KeyboardInterrupt, click.Abort):
        return _fail(INTERRUPTED, "interrupted")
    except BrokenPipeError:
        _drop_output()  # whoever read it has gone
        return NOT_SO
    except MemoryError:
        return _fail(WRONG_INPUT, "out of memory: give --memory less than the machine has free, or --workers fewer")
    except OSError as failure:
        try:
            sys.stdout.flush()
        except OSError:
            _drop_output()  # the disk under it is full
        return _fail(WRONG_INPUT, _reason(failure))


def _drop_output() -> None:
    """Let nothing that is still to be printed be written any more, not even at exit."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _fail(code: int, message: str) -> int:
    print("tilemap:", " ".join(message.split()), file=sys.stderr, flush=True)
    return code


def _reason(failure: OSError) -> str:
    what = failure.strerror or str(failure) or type(failure).__name__
    if failure.errno == errno.ENOSPC or "No space left on device" in what:
        what = "the disk is full: make room and start again"
    return f"{failure.filename}: {what}" if failure.filename else what


@click.group(invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, message="tilemap %(version)s")
@click.pass_context
def commands(context: click.Context) -> None:
    """Project a simulated volume once, at its finest scale, and travel through it in a browser."""
    if context.invoked_subcommand is None:
        click.echo(context.get_help())


@commands.command()
@click.argument("files", nargs=-1, required=True, type=PATH, metavar="FILE...")
@click.option("--write", type=PATH, metavar="OUT.yaml", help="Draft a build file for these files.")
def probe(files: tuple[Path, ...], write: Path | None) -> None:
    """Say what is in particle files: species, fields, units, box and moment."""
    from tilemap.sources import probe as probing

    click.echo(probing.probe(list(files)).rstrip("\n"))
    if write is not None:
        if write.exists():
            raise InputError(f"{write} is there already; name a file that is not")
        write.write_text(probing.draft(list(files), write.parent), encoding="utf-8")
        click.echo(f"drafted {write}")


@commands.command()
@click.argument("build_file", type=PATH, metavar="BUILD.yaml")
@click.option("--out", type=PATH, metavar="ATLAS", help="The atlas folder to publish.")
@click.option("--memory", metavar="SIZE", help="Most memory to use, such as 4GiB.  [default: half of what is free]")
@click.option("--workers", type=click.IntRange(min=1), metavar="N", help="Cores to use.  [default: all]")
@click.option("--dry-run", is_flag=True, help="Say what would be done and what it would take, and do nothing.")
def build(build_file: Path, out: Path | None, memory: str | None, workers: int | None, dry_run: bool) -> None:
    """Make an atlas from a snapshot, as a build file describes it.

    A build that was stopped goes on where it was when the same command is given again.
    """
    limit = None if memory is None else byte_count(memory)
    if dry_run:
        from tilemap.build_atlas import foresee_build

        click.echo("\n".join(foresee_build(build_file, workers, limit)))
        return
    if out is None:
        raise click.UsageError("give --out ATLAS, the folder to publish, or --dry-run to see what it would take")
    from tilemap.build_atlas import build_atlas

    with shown(sys.stderr) as report:
        published = build_atlas(build_file, out, workers=workers, memory=limit, progress=report)
    click.echo(f"published {published}")


@commands.command()
@click.argument("atlas", type=PATH, metavar="ATLAS")
def verify(atlas: Path) -> int:
    """Check an atlas: every checksum, every tile, every level against the one below; exit 1 if anything is off."""
    from tilemap.pyramid.verify import verify as verified

    with shown(sys.stderr) as report:
        findings = [str(finding) for finding in verified(atlas, report)]
    for finding in findings:
        click.echo(finding)
    if findings:
        raise NotSoError(f"{atlas}: {len(findings)} {'thing is' if len(findings) == 1 else 'things are'} off")
    click.echo(f"{atlas}: nothing is off")
    return DONE


@commands.command()
@click.argument("atlases", nargs=-1, required=True, type=PATH, metavar="ATLAS...")
@click.option(
    "--host", default=HOST, show_default=True, help="Address to listen on; 0.0.0.0 is every one of this machine."
)
@click.option(
    "--port", default=PORT, show_default=True, type=click.IntRange(0, 65535), help="Port; 0 takes a free one."
)
def serve(atlases: tuple[Path, ...], host: str, port: int) -> None:
    """Serve atlases, and the frame to look at them with, until stopped."""
    from tilemap.server.run import serve as serving

    serving(atlases, host, port, say=_say_now)


@commands.command()
@click.argument("folder", default="marram", type=PATH, metavar="[FOLDER]")
@click.option("--no-serve", is_flag=True, help="Stop when the atlas is built.")
@click.option(
    "--port", default=PORT, show_default=True, type=click.IntRange(0, 65535), help="Port; 0 takes a free one."
)
@click.option(
    "--scale",
    default=1.0,
    show_default=True,
    type=click.FloatRange(0, 1, min_open=True),
    help="Fraction of the particles to make, for a quick look.",
)
def demo(folder: Path, no_serve: bool, port: int, scale: float) -> None:
    """Make the invented Marram volume in FOLDER, build its atlas and serve it.

    What is there already and whole is not made again.
    """
    from tilemap.demo import make

    atlas = folder / "marram.atlas"
    with shown(sys.stderr) as report:
        build_file = make(folder, progress=report, scale=scale)
        if not _is_built(atlas, build_file):
            from tilemap.build_atlas import build_atlas

            build_atlas(build_file, atlas, progress=report)
    click.echo(f"the atlas is {atlas}")
    if not no_serve:
        # A process of its own: the server forks, which is not safe where the engine's threads have run, and what
        # the build held in memory goes back to the machine.
        sys.stdout.flush()
        arguments = ["-m", "tilemap", "serve", os.fspath(atlas), "--port", str(port)]
        os.execv(sys.executable, [sys.executable, *arguments])


def _is_built(atlas: Path, build_file: Path) -> bool:
    """Whether an atlas was made from this build file as it stands, after the snapshot and objects beside it."""
    try:
        described = json.loads((atlas / "atlas.json").read_bytes())
        published = (atlas / "atlas.json").stat().st_mtime_ns
        inputs = [*build_file.parent.glob("*.ecsv"), *(build_file.parent / "snapshot").iterdir()]
        newest = max(path.stat().st_mtime_ns for path in inputs)
        same_text = described["provenance"]["build_file"] == build_file.read_text(encoding="utf-8")
    except (OSError, ValueError, KeyError):
        return False
    return same_text and newest <= published


def _say_now(line: str) -> None:
    print(line, flush=True)
