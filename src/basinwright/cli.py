"""The command line: words and exit status; the work is elsewhere.

Heavy libraries are imported inside the commands, so that ``--help`` answers at once.
"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from basinwright.errors import BasinwrightError
from basinwright.outputs.screen import Screen

if TYPE_CHECKING:
    from basinwright.pipeline import Outcome

DONE, SOME_FAILED, REJECTED, BUG, INTERRUPTED = 0, 1, 2, 70, 130

app = typer.Typer(
    name="basinwright",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,  # plain help: half the start-up time
    help="From terrain to design flood hydrographs for ungauged outlets, with the evidence for every number.",
    epilog="Results support, and do not replace, the judgement of a licensed engineer and local drainage criteria.",
)

ProjectFile = Annotated[Path, typer.Argument(metavar="PROJECT.toml", help="The project file.")]
RunDir = Annotated[Path, typer.Argument(metavar="RUN_DIR", help="The folder of a finished run.")]


def _print_version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        print(version("basinwright"))
        raise typer.Exit


@app.callback()
def _root(
    debug: Annotated[
        bool, typer.Option("--debug", help="Show the traceback of an unexpected error (works anywhere).")
    ] = False,
    version: Annotated[
        bool, typer.Option("--version", callback=_print_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    pass


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(metavar="[DIR]", help="Where to put it.")] = Path("basinwright-demo"),
) -> int:
    """Copy the sample project to DIR and run it there."""
    from basinwright import pipeline

    with Screen() as screen:
        project_file = pipeline.copy_sample(folder)
        screen(f"The sample project is in {folder}")
        outcome = pipeline.run(project_file, overwrite=True, say=screen)
    return _report(outcome)


@app.command()
def start(folder: Annotated[Path, typer.Argument(metavar="DIR", help="The new project's folder.")]) -> int:
    """Write a commented project.toml to fill in."""
    from basinwright import pipeline

    path = pipeline.start(folder)
    print(f"Wrote {path}\nFill it in, then: basinwright check {path}")
    return DONE


@app.command()
def check(project: ProjectFile) -> int:
    """Validate every input of a project, compute nothing, list all problems at once."""
    from basinwright import pipeline

    for line in pipeline.check(project):
        print(line)
    return DONE


@app.command()
def run(
    project: ProjectFile,
    out: Annotated[
        Path | None, typer.Option(metavar="DIR", help="Output folder; default: out/ beside the project file.")
    ] = None,
    jobs: Annotated[
        int | None, typer.Option(metavar="N", min=1, help="Processor cores to use; default: compute.jobs.")
    ] = None,
    resume: Annotated[
        bool, typer.Option("--resume", help="Continue: skip every finished stage that still holds.")
    ] = False,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace the run that the folder holds.")] = False,
    summary_only: Annotated[
        bool, typer.Option("--summary-only", help="Screening: tables only, no polygons, terrain or hydrograph series.")
    ] = False,
    also_at: Annotated[
        list[str] | None,
        typer.Option(
            "--also-at", metavar="SIZE", help='Repeat on coarser cells, such as "30 m", and compare; may be repeated.'
        ),
    ] = None,
) -> int:
    """Do the whole job: terrain to flood hydrographs, for every outlet."""
    from basinwright import pipeline

    with Screen() as screen:
        outcome = pipeline.run(
            project,
            out=out,
            jobs=jobs,
            resume=resume,
            overwrite=overwrite,
            summary_only=summary_only,
            also_at=also_at or (),
            say=screen,
        )
    return _report(outcome)


@app.command()
def retime(folder: RunDir) -> int:
    """Compute timing, runoff and hydrographs again from a run's tables, edited or not; no raster is read."""
    from basinwright import pipeline

    with Screen() as screen:
        outcome = pipeline.retime(folder, say=screen)
    return _report(outcome)


@app.command()
def report(
    folder: RunDir,
    outlet_id: Annotated[
        str | None, typer.Argument(metavar="[OUTLET_ID]", help="Make the page of this outlet alone.")
    ] = None,
) -> int:
    """Make the HTML report of a finished run again."""
    from basinwright import pipeline

    with Screen() as screen:
        page = pipeline.report(folder, outlet_id, say=screen)
    print(page)
    return DONE


@app.command()
def explain(
    folder: RunDir,
    outlet_id: Annotated[str, typer.Argument(metavar="OUTLET_ID", help="The outlet.")],
    column: Annotated[
        str,
        typer.Argument(metavar="COLUMN", help="A column, such as peak_10yr_cfs, or with its table: segments.slope."),
    ],
    depth: Annotated[int, typer.Option(metavar="N", min=0, help="Explain inputs in turn, to this depth.")] = 1,
    where: Annotated[
        list[str] | None,
        typer.Option(
            metavar="COLUMN=VALUE", help="Which row, where the outlet has several: segment=3, method=kirpich."
        ),
    ] = None,
    json_wanted: Annotated[bool, typer.Option("--json", help="Print plain values for other programs.")] = False,
) -> int:
    """Say where one number of a finished run came from: formula, inputs, published row, cells, flags."""
    import json

    from basinwright import explaining

    chosen = dict(text.partition("=")[::2] for text in where or [])
    explanation = explaining.explain(folder, outlet_id, column, depth=depth, where=chosen)
    if json_wanted:
        print(json.dumps(explaining.as_values(explanation), indent=1, ensure_ascii=False))
    else:
        print(explaining.as_text(explanation), end="")
    return DONE


@app.command()
def review(
    folder: RunDir,
    port: Annotated[int, typer.Option(metavar="N", min=0, max=65535, help="Where to listen; default: any free.")] = 0,
    browser: Annotated[bool, typer.Option(help="Open the page in the browser.")] = True,
) -> int:
    """Check and correct a run outlet by outlet on a page of this machine."""
    from basinwright.review.server import serve

    serve(folder, port=port, say=lambda text: print(text, flush=True), browser=browser)
    return DONE


@app.command()
def methods() -> int:
    """Print every timing method, unit hydrograph, storm and published table shipped, with source and range."""
    from basinwright import catalogue

    catalogue.show()
    return DONE


def _report(outcome: Outcome) -> int:
    from basinwright.outputs import summary

    summary.show(outcome)
    return SOME_FAILED if outcome.failed else DONE


def main() -> None:
    """Run the command line and leave with its exit status."""
    debug = "--debug" in sys.argv
    arguments = [argument for argument in sys.argv[1:] if argument != "--debug"] or ["--help"]
    try:
        status = app(arguments, standalone_mode=False)
    except BasinwrightError as error:
        if debug:
            raise
        print(error, file=sys.stderr)
        status = REJECTED
    except (KeyboardInterrupt, typer.Abort):
        status = INTERRUPTED
    except Exception as error:
        if hasattr(error, "format_message"):  # the user's command line: an unknown option, a missing argument
            print(f"command line: {error.format_message()} (basinwright --help)", file=sys.stderr)
            status = REJECTED
        elif debug:
            raise
        else:
            print(f"basinwright: unexpected error: {type(error).__name__}: {error}", file=sys.stderr)
            print("This is a fault of basinwright: please report it with the output of --debug.", file=sys.stderr)
            status = BUG
    if status == INTERRUPTED:
        print("Interrupted. Nothing was replaced; basinwright run ... --resume continues.", file=sys.stderr)
    sys.exit(status)
