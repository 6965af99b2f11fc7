"""The command line. Thin: options in, records out, no numerics; everything heavy is imported when a command runs."""

from __future__ import annotations

import contextlib
import json
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer

if TYPE_CHECKING:
    from anticlast.records import Finding, Made, Operation

app = typer.Typer(
    name="anticlast",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="Plan, post and prove saddle surfaces on small 4- and 5-axis mills."
    " A program is released only if its own text, read back, cuts a virtual blank within every limit."
    "\n\nExit status: 0 done, 1 a check failed (program withheld), 2 bad input or usage.",
)

JobArgument = Annotated[Path, typer.Argument(metavar="JOB", help="Job file (TOML).", show_default=False)]
JsonOption = Annotated[bool, typer.Option("--json", help="Print data only, as JSON.")]


def _fail(error: Exception, status: int) -> NoReturn:
    typer.echo(str(error), err=True)
    raise typer.Exit(status)


@contextlib.contextmanager
def _errors() -> Iterator[None]:
    """Turn the project's errors into a message and an exit status, never a traceback."""
    from anticlast.errors import AnticlastError

    try:
        yield
    except AnticlastError as error:
        _fail(error, error.exit_status)
    except MemoryError:
        _fail(MemoryError("not enough memory for this job; choose a coarser --grid"), 2)
    except KeyboardInterrupt:
        _fail(KeyboardInterrupt("stopped; no program was released"), 130)  # type: ignore[arg-type]


@contextlib.contextmanager
def _progress() -> Iterator[Callable[[str], None]]:
    """Show what is being done on a terminal; print nothing when piped."""
    if not sys.stderr.isatty():
        yield lambda _: None
        return
    from rich.console import Console

    with Console(stderr=True).status("starting") as status:
        yield lambda text: status.update(text)


def _print_json(data: Any) -> None:
    typer.echo(json.dumps(data, indent=2))


def _clock(seconds: float) -> str:
    whole = round(seconds)
    hours, minutes = divmod(whole // 60, 60)
    return f"{hours} h {minutes:02d} min {whole % 60:02d} s" if hours else f"{minutes} min {whole % 60:02d} s"


def _finding_line(finding: Finding) -> str:
    mark = "ok  " if finding.ok else "note" if finding.warning else "FAIL"
    where = f" (line {finding.line})" if finding.line and not finding.ok else ""
    return f"  {mark}  {finding.message}{where}"


def _scallop_words(height_mm: float) -> str:
    """Say what scallop is predicted; roughing and outline operations leave none that counts."""
    return f", scallop {height_mm * 1000:.2f} um predicted" if height_mm > 0.0 else ""


def _report(made: Made, out: Path) -> None:
    job = made.job
    for entry in made.operations:
        floor = (
            f", {entry.cut_length_mm / entry.length_floor_mm:.3f} of the floor"
            if entry.length_floor_mm
            else ""
        )
        typer.echo(
            f"operation {entry.index}: {entry.does}, {entry.pattern}, T{entry.cutter}: {entry.passes} passes,"
            f" cut length {entry.cut_length_mm / 1000:.2f} m{floor}, links {entry.link_length_mm / 1000:.2f} m"
            f"{_scallop_words(entry.scallop_predicted_mm)}, {_clock(entry.time_s)}"
        )
    typer.echo("checks:")
    for finding in sorted(made.findings, key=lambda item: (item.ok, item.warning)):
        typer.echo(_finding_line(finding))
    if made.times is not None:
        typer.echo(f"cycle time {_clock(made.times.total_s)}, estimated")
    if made.released:
        typer.echo(f"RELEASED: {out / (job.slug + '.ngc')}")
    else:
        typer.echo("WITHHELD: no program was written. What to change:")
        for line in made.advice:
            typer.echo(f"  - {line}")
    typer.echo(f"look at: {out / 'report.html'}")
    if made.released:
        typer.echo("Prove out above the part before you cut; the machine's manual comes first.")


@app.command(epilog="Example: anticlast make samples/formwork-tile/job.toml --out out/formwork-tile")
def make(
    job: JobArgument,
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder for the results.")] = Path("out"),
    grid: Annotated[
        float | None,
        typer.Option("--grid", metavar="MM", min=0.01, max=5.0, help="Spacing of the proof's grid, mm."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Plan, post, read back, prove, estimate, report.

    Writes the program, summary.json, report.html and surface.stl into DIR. The program is written only if every check passed.
    """
    from anticlast import pipeline

    with _errors(), _progress() as progress:
        loaded = pipeline.load_job(job)
        made = pipeline.make(loaded, out, grid_mm=grid, progress=progress)
    if as_json:
        _print_json(pipeline.summary(made))
    else:
        _report(made, out)
    raise typer.Exit(0 if made.released else 1)


@app.command(epilog="Example: anticlast survey samples/formwork-tile/job.toml")
def survey(
    job: JobArgument,
    picture: Annotated[
        Path | None,
        typer.Option(
            "--picture", metavar="FILE", help="Also draw the margin left on each axis: .png or .svg."
        ),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Say what the surface asks of cutter and machine: slopes, curvatures, largest ball, travel, best place on the table."""
    from anticlast import pipeline

    with _errors():
        loaded = pipeline.load_job(job)
        found = pipeline.survey(loaded)
        if picture is not None:
            from anticlast.report.picture_placement import placement_picture

            placement_picture(loaded, found.placement, picture)
    if as_json:
        _print_json(found.as_json())
        return
    for line in found.lines():
        typer.echo(line)
    if picture is not None:
        typer.echo(f"picture: {picture}")


def _ball_operation(operations: tuple[Operation, ...], job: Path) -> Operation:
    from anticlast.errors import BadInput, Fault

    for operation in operations:
        if operation.cutter.shape == "ball":
            return operation
    raise BadInput(Fault(str(job), 0, "operation", "no operation uses a ball cutter; scallop needs one"))


@app.command(
    epilog="Example: anticlast scallop samples/formwork-tile/job.toml --scallop 0.005 --picture scallop.png"
)
def scallop(
    job: JobArgument,
    stepover: Annotated[
        float | None,
        typer.Option("--stepover", metavar="S", help="Distance between passes, in the job's units."),
    ] = None,
    height: Annotated[
        float | None, typer.Option("--scallop", metavar="H", help="Scallop height, in the job's units.")
    ] = None,
    direction: Annotated[
        float | None,
        typer.Option(
            "--direction", metavar="DEG", help="Feed direction from part X; the job's if not given."
        ),
    ] = None,
    picture: Annotated[
        Path | None, typer.Option("--picture", metavar="FILE", help="Also draw a plan map: .png or .svg.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Answer which stepover leaves which scallop, here, with this cutter.

    Give --stepover or --scallop; without either, the job's first operation with a ball decides.
    """
    from anticlast import pipeline
    from anticlast.errors import BadInput, Fault

    with _errors():
        if stepover is not None and height is not None:
            raise BadInput(Fault("command line", 0, "--stepover, --scallop", "both given; give one of them"))
        for name, value in (("--stepover", stepover), ("--scallop", height)):
            if value is not None and not 0 < value < float("inf"):
                raise BadInput(Fault("command line", 0, name, f"found {value}; give a length above 0"))
        if picture is not None and picture.suffix.lower() not in {".png", ".svg"}:
            raise BadInput(
                Fault("command line", 0, "--picture", f"found {picture.name!r}; give a .png or .svg file")
            )
        loaded = pipeline.load_job(job)
        operation = _ball_operation(loaded.operations, job)
        answer = pipeline.scallop(
            loaded, operation, stepover=stepover, scallop=height, direction_deg=direction
        )
        if picture is not None:
            from anticlast.report.pictures import scallop_picture

            scallop_picture(loaded, answer, picture)
    if as_json:
        _print_json(answer.as_json())
        return
    for line in answer.lines(loaded.units):
        typer.echo(line)
    if picture is not None:
        typer.echo(f"picture: {picture}")


@app.command(epilog="Example: anticlast machines")
def machines(as_json: JsonOption = False) -> None:
    """List the machine files found and what they can do."""
    from anticlast.machine.definition import list_machines, machine_json, machine_lines

    with _errors():
        found = list_machines()
    if as_json:
        _print_json([machine_json(machine) for machine in found])
        return
    for machine in found:
        for line in machine_lines(machine):
            typer.echo(line)


@app.command(epilog="Example: anticlast prove out/formwork-tile.ngc --job samples/formwork-tile/job.toml")
def prove(
    program: Annotated[Path, typer.Argument(metavar="PROGRAM", help="RS-274 program.", show_default=False)],
    job: Annotated[
        Path, typer.Option("--job", metavar="JOB", help="Job file it is for.", show_default=False)
    ],
    grid: Annotated[
        float | None,
        typer.Option("--grid", metavar="MM", min=0.01, max=5.0, help="Spacing of the proof's grid, mm."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Read any RS-274 program for a job as the control would and say what it does to the blank."""
    from anticlast import pipeline

    with _errors(), _progress() as progress:
        made = pipeline.prove(program, pipeline.load_job(job), grid_mm=grid, progress=progress)
    if as_json:
        _print_json(pipeline.summary(made))
    else:
        typer.echo("checks:")
        for finding in sorted(made.findings, key=lambda item: (item.ok, item.warning)):
            typer.echo(_finding_line(finding))
        typer.echo("PASSED: every check" if made.released else "FAILED: this program must not be run")
    raise typer.Exit(0 if made.released else 1)


@contextlib.contextmanager
def _counting() -> Iterator[Callable[[str, int, int], None]]:
    """Show how much of long work is done on a terminal; print nothing when piped."""
    if not sys.stderr.isatty():
        yield lambda text, done, total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("starting", total=None)
        yield lambda text, done, total: bar.update(task, description=text, completed=done, total=total)


@app.command(epilog="Example: anticlast compare samples/press-pad/job.toml --cores 1 --picture compare.png")
def compare(
    job: JobArgument,
    operation: Annotated[
        int | None,
        typer.Option("--operation", metavar="N", help="Only this operation; all that finish if not given."),
    ] = None,
    every: Annotated[
        bool, typer.Option("--all", help="Try every combination, however long it takes.")
    ] = False,
    front: Annotated[
        bool, typer.Option("--front", help="Try every cutter and pattern at half and twice the scallop too.")
    ] = False,
    prove: Annotated[
        int, typer.Option("--prove", metavar="K", min=0, max=100, help="Prove the K best cases in full.")
    ] = 1,
    grid: Annotated[
        float | None,
        typer.Option("--grid", metavar="MM", min=0.01, max=5.0, help="Spacing of the proof's grid, mm."),
    ] = None,
    picture: Annotated[
        Path | None,
        typer.Option(
            "--picture", metavar="FILE", help="Also draw time against scallop: .png or .svg. Implies --front."
        ),
    ] = None,
    cores: Annotated[
        int | None,
        typer.Option(
            "--cores", metavar="N", min=1, max=1024, help="Worker processes; all cores if not given."
        ),
    ] = None,
    dask: Annotated[
        str | None,
        typer.Option(
            "--dask", metavar="ADDRESS", help="Run the cases on the Dask cluster of this scheduler."
        ),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Try cutters, patterns, directions and tilts that meet the limits and rank them by time.

    Every case is planned, posted, read back and timed like the job itself; the best is proven. Exits 1 if no case can be cut.
    """
    from anticlast import pipeline
    from anticlast.compare.answer import as_json as compared_json
    from anticlast.compare.search import compare as compare_job

    with _errors(), _counting() as progress:
        if picture is not None:
            from anticlast.report.picture_sheet import check_suffix

            check_suffix(picture)
        loaded = pipeline.load_job(job)
        found = compare_job(
            loaded, operation=operation, every=every, front=front or picture is not None, prove=prove, grid_mm=grid,
            cores=cores, dask=dask, progress=progress,
        )  # fmt: skip
        if picture is not None:
            from anticlast.report.picture_compare import compare_picture

            compare_picture(loaded, found, picture)
    if as_json:
        _print_json(compared_json(found))
    else:
        for one in found:
            for line in one.lines():
                typer.echo(line)
        if picture is not None:
            typer.echo(f"picture: {picture}")
    raise typer.Exit(0 if all(one.best is not None for one in found) else 1)


@app.command(epilog="Example: anticlast stock samples/press-pad/job.toml --picture stock.png")
def stock(
    job: JobArgument,
    before: Annotated[
        int | None,
        typer.Option("--before", metavar="N", min=1, help="Stock before operation N, and its passes only."),
    ] = None,
    grid: Annotated[
        float | None,
        typer.Option("--grid", metavar="MM", min=0.05, max=5.0, help="Spacing of the stock's columns, mm."),
    ] = None,
    picture: Annotated[
        Path | None,
        typer.Option("--picture", metavar="FILE", help="Also draw what remains, and sections: .png or .svg."),
    ] = None,
    page: Annotated[
        Path | None,
        typer.Option("--page", metavar="FILE", help="Also write an interactive page of stock and load."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Preview the stock before an operation and what each pass will meet, before any cutting.

    Without --before: the blank, and the passes of all operations. Exits 1 if a check failed.
    """
    from anticlast import pipeline

    with _errors(), _progress() as progress:
        if picture is not None:
            from anticlast.report.picture_sheet import check_suffix

            check_suffix(picture)
        loaded = pipeline.load_job(job)
        found = pipeline.stock(loaded, before, spacing_mm=grid, progress=progress)
        if picture is not None:
            from anticlast.report.picture_stock import stock_picture

            stock_picture(found, picture)
        if page is not None:
            from anticlast.report.stock_page import write_stock_page

            progress("the page")
            write_stock_page(found, page)
    if as_json:
        _print_json(found.as_json(only=before))
    else:
        for line in found.lines(only=before):
            typer.echo(line)
        if picture is not None:
            typer.echo(f"picture: {picture}")
        if page is not None:
            typer.echo(f"page: {page}")
    raise typer.Exit(0 if all(finding.ok or finding.warning for finding in found.findings) else 1)


@app.command(
    epilog="Example: anticlast time out/formwork-tile.ngc --job samples/formwork-tile/job.toml --measured 7:35"
)
def time(
    program: Annotated[Path, typer.Argument(metavar="PROGRAM", help="RS-274 program.", show_default=False)],
    job: Annotated[
        Path, typer.Option("--job", metavar="JOB", help="Job file it is for.", show_default=False)
    ],
    measured: Annotated[
        str | None,
        typer.Option(
            "--measured",
            metavar="TIME|FILE",
            help="What a stopwatch said: seconds or M:SS, or a .csv file with the columns program, seconds.",
        ),
    ] = None,
    error: Annotated[
        float | None,
        typer.Option(
            "--error",
            metavar="S",
            min=0.01,
            max=3600.0,
            help="Error of a reading, seconds; 0.5 if not given.",
        ),
    ] = None,
    picture: Annotated[
        Path | None,
        typer.Option(
            "--picture",
            metavar="FILE",
            help="Also draw the feed reached and what holds it back: .png or .svg.",
        ),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Say how long a program takes, per operation and pass, and what holds the feed back.

    With --measured: fit acceleration, jerk and block rate to what was measured, say how sure that is, and print the
    lines for the machine file, which is not changed. Exits 1 if no values explain the readings.
    """
    from anticlast import pipeline
    from anticlast.tolerances import STOPWATCH_S

    fitted = None
    with _errors(), _progress() as progress:
        if picture is not None:
            from anticlast.report.picture_sheet import check_suffix

            check_suffix(picture)
        readings = _readings(program, measured)
        loaded = pipeline.load_job(job)
        timed, read, times = pipeline.time(program, loaded)
        if picture is not None:
            from anticlast.report.picture_time import time_picture

            time_picture(loaded, timed, read.motions, times, pipeline.in_part(read, loaded), picture)
        if readings:
            fitted = pipeline.calibrate(readings, loaded, error_s=error or STOPWATCH_S, progress=progress)
    if as_json:
        _print_json({**timed.as_json(), "calibration": fitted.as_json() if fitted else None})
    else:
        for line in (*timed.lines(), *(fitted.lines() if fitted else ())):
            typer.echo(line)
        if picture is not None:
            typer.echo(f"picture: {picture}")
    raise typer.Exit(0 if fitted is None or fitted.explained else 1)


def _readings(program: Path, measured: str | None) -> list[tuple[Path, float]]:
    """Programs and seconds from what stands after ``--measured``."""
    from anticlast.errors import BadInput, Fault
    from anticlast.machine.measured import read_measured, seconds_of

    if measured is None:
        return []
    if measured.lower().endswith(".csv"):
        return [(item.program, item.seconds) for item in read_measured(Path(measured))]
    seconds = seconds_of(measured)
    if seconds is None:
        message = f"found {measured!r}; give seconds, minutes and seconds such as 7:35, or a .csv file"
        raise BadInput(Fault("command line", 0, "--measured", message))
    return [(program, seconds)]


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> None:
    if version:
        from anticlast import __version__

        typer.echo(f"anticlast {__version__}")
        raise typer.Exit


def main() -> None:
    """Run the command line."""
    app()


if __name__ == "__main__":
    main()
