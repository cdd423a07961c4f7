"""The command line: one thin function a verb; a user's mistake is one line and exit status 2."""

from __future__ import annotations

import json
import traceback
from dataclasses import asdict
from pathlib import Path
from typing import Any

import click

from cubeforge._version import VERSION
from cubeforge.errors import CubeforgeError

# Verbs import what they need when they run: `--help` should not wait seconds for numba, dask and astropy.


class _Group(click.Group):
    """Turns errors into one line each."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except CubeforgeError as error:
            self._tell(ctx, str(error))
            ctx.exit(error.exit_status)
        except BrokenPipeError:
            raise
        except OSError as error:
            self._tell(ctx, f"{error.filename or 'a file'}: {error.strerror or error}")
            ctx.exit(3)
        except KeyboardInterrupt:
            later = "; the same command goes on from here" if ctx.invoked_subcommand == "render" else ""
            self._tell(ctx, f"stopped{later}")
            ctx.exit(130)

    def _tell(self, ctx: click.Context, message: str) -> None:
        if ctx.params.get("debug"):
            traceback.print_exc()
        for line in message.splitlines():
            click.echo(f"cubeforge: {line}", err=True)


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(VERSION, message="cubeforge %(version)s")
@click.option("--debug", is_flag=True, help="Show the traceback of an error.")
def main(debug: bool) -> None:
    """Turn AMR simulations of molecular clouds into synthetic spectral-line cubes."""


@main.command()
@click.argument("snapshot", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Write JSON.")
def inspect(snapshot: Path, as_json: bool) -> None:
    """Show a SNAPSHOT's levels, patches, cell sizes, fields and bytes."""
    from cubeforge.snapshots import open_snapshot
    from cubeforge.snapshots.describe import describe

    summary = describe(open_snapshot(snapshot))
    if as_json:
        click.echo(json.dumps(asdict(summary)))
        return
    from cubeforge.terminal_pages import show_snapshot

    show_snapshot(summary)


@main.command()
@click.argument("job", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Write JSON.")
@click.option("--threads", default=1, show_default=True, type=click.IntRange(1),
              help="Threads of each worker.")  # fmt: skip
def plan(job: Path, as_json: bool, threads: int) -> None:
    """Validate a JOB file and say what its render takes; reads no field data."""
    from cubeforge.engine.plan import make_plan
    from cubeforge.engine.setup import build_setup
    from cubeforge.job import load_job

    planned = make_plan(build_setup(load_job(job)))
    if as_json:
        click.echo(json.dumps(planned.summary() | {"least_memory": planned.least_memory(threads)}))
        return
    from cubeforge.terminal_pages import show_plan

    show_plan(planned, threads)


def _memory(_: click.Context, __: click.Parameter, value: str | None) -> int | None:
    if value is None:
        return None
    from cubeforge.quantities import parse

    return int(parse(value, "memory", where="--memory"))


@main.command()
@click.argument("job", type=click.Path(path_type=Path))
@click.option("--workers", default=1, show_default=True, type=click.IntRange(0),
              help="Processes of a local cluster; 0 renders in this process, without dask.")  # fmt: skip
@click.option(
    "--threads", default=1, show_default=True, type=click.IntRange(1), help="Threads of each worker."
)
@click.option("--memory", callback=_memory, metavar="SIZE",
              help='Memory for patches and tiles in each worker, such as "2 GiB".')  # fmt: skip
@click.option("--scheduler-file", type=click.Path(path_type=Path),
              help="Use the workers of a dask scheduler that is up already.")  # fmt: skip
@click.option("--picture/--no-picture", default=True, show_default=True, help="A quick-look PNG at the end.")
@click.option("--quiet", is_flag=True, help="No progress.")
def render(job: Path, workers: int, threads: int, memory: int | None, scheduler_file: Path | None, picture: bool,
           quiet: bool) -> None:  # fmt: skip
    """Render a JOB file into its cube; the same command goes on after an interruption."""
    from cubeforge.engine.interrupts import stop_on_sigterm
    from cubeforge.engine.render import render as run
    from cubeforge.job import load_job
    from cubeforge.terminal import ProgressLine
    from cubeforge.terminal_pages import show_outcome

    loaded = load_job(job)
    with stop_on_sigterm(), ProgressLine(quiet=quiet) as line:
        outcome = run(loaded, workers=workers, threads=threads, memory=memory,
                      scheduler_file=scheduler_file, watch=line.update)  # fmt: skip
    if picture:
        from cubeforge.report.quicklook import quicklook

        drawn = outcome.cube.with_suffix(".png")
        quicklook(outcome.cube, drawn)
        show_outcome(outcome, drawn)
    else:
        show_outcome(outcome, None)


@main.command()
@click.argument("cube", type=click.Path(path_type=Path))
@click.argument("fits", type=click.Path(path_type=Path))
@click.option("--overwrite", is_flag=True, help="Replace FITS if it is there.")
@click.option("--partial", is_flag=True, help="Write an unfinished cube, NaN where tiles are missing.")
@click.option("--maps", is_flag=True, help="Write by-products, such as the mass column, as extensions.")
@click.option("--clipped", is_flag=True,
              help="Write a cube whose channels miss more of the line than its job allows.")  # fmt: skip
def export(cube: Path, fits: Path, overwrite: bool, partial: bool, maps: bool, clipped: bool) -> None:
    """Write a finished CUBE to a FITS file, streamed."""
    from cubeforge.cube.fits import export_fits
    from cubeforge.cube.store import open_cube
    from cubeforge.engine.outside import check_outside

    opened = open_cube(cube)
    if not clipped:
        check_outside(opened)
    export_fits(opened, fits, overwrite=overwrite, partial=partial, maps=maps)
    click.echo(str(fits))


@main.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--seed", default=7, show_default=True, help="Of the turbulence.")
@click.option(
    "--levels", default=4, show_default=True, type=click.IntRange(1, 8), help="Levels of refinement."
)
def demo(folder: Path, seed: int, levels: int) -> None:
    """Write a small snapshot of a turbulent clump and a job file for it into FOLDER."""
    from cubeforge.demo import write_demo

    job = write_demo(folder, seed=seed, levels=levels)
    click.echo(f"{job}\nnext: cubeforge render {job}")


if __name__ == "__main__":
    main()
