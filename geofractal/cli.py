"""The command line: thin, and quick to answer, so whatever is heavy is imported inside a command."""

from __future__ import annotations

import sys
import warnings
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

import click

from geofractal.errors import GeofractalError, GeofractalWarning

EXIT_CODES = """\b
Exit codes:
  0    done
  1    done, with refusals that the batch asked to treat as failures
  2    usage, batch file or measure is wrong; nothing was measured
  3    an input cannot be read, or an output cannot be written
  4    internal error; --verbose shows where
  130  interrupted (143 when told to terminate, 137 when ended inside native code)
"""

F = TypeVar("F", bound=Callable[..., Any])

FILE = click.Path(path_type=Path)


@click.group(
    epilog=EXIT_CODES,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)
@click.version_option(package_name="geofractal")
def cli() -> None:
    """Shape figures across scales for shorelines, rivers, land cover and basins."""


def _shared(command: F) -> F:
    """Add the options that every command has."""
    quiet = click.option("-q", "--quiet", is_flag=True, help="Show neither progress nor warnings.")
    verbose = click.option(
        "-v", "--verbose", is_flag=True, help="Show details, and where an internal error arose."
    )
    return quiet(verbose(command))


def _with_progress(command: F) -> F:
    """Add the option that chooses how progress is shown."""
    styles = click.Choice(["auto", "plain", "json"])
    text = "How progress is shown, on standard error: a moving line on a terminal, plain lines, JSON lines."
    return click.option("--progress", "style", type=styles, default="auto", show_default=True, help=text)(
        command
    )


@cli.command(epilog=EXIT_CODES)
@click.argument("batch_file", type=FILE)
@_with_progress
@_shared
def run(batch_file: Path, style: Any, *, quiet: bool, verbose: bool) -> None:
    """Run a batch: measure its layers and write their copies."""
    from geofractal.interrupt import guarded

    with _plain_errors(quiet=quiet, verbose=verbose), guarded():
        from geofractal.batch.run import run_batch
        from geofractal.config import load_config
        from geofractal.progress import make_progress

        batch = load_config(batch_file)
        record = run_batch(batch, progress=make_progress("none" if quiet else style, details=verbose))
        if not quiet:
            _print([*_summary(record), f"Results and run record: {batch.outputs.folder}"])
        sys.exit(record["exit_code"])


@cli.command(epilog=EXIT_CODES)
@click.argument("batch_file", type=FILE)
@_shared
def check(batch_file: Path, *, quiet: bool, verbose: bool) -> None:
    """Check a batch and its layers without measuring.

    Tells the columns to come, the distortion of planes, what formats will lose, and the work.
    """
    with _plain_errors(quiet=quiet, verbose=verbose):
        from geofractal.batch.check import check_batch
        from geofractal.config import load_config

        report = check_batch(load_config(batch_file))
        _print(report.lines())
        sys.exit(3 if report.failed else 0)


@cli.command(epilog=EXIT_CODES)
@click.argument("path", type=FILE)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
@click.option("--starter", type=FILE, metavar="FILE", help="Also write a batch file to start from.")
@_with_progress
@_shared
def inspect(
    path: Path, starter: Path | None, style: Any, *, as_json: bool, quiet: bool, verbose: bool
) -> None:
    """Tell what a file or folder holds.

    Its layers, kinds of geometry, CRSs, detail, usable scales and problems.
    """
    with _plain_errors(quiet=quiet, verbose=verbose):
        from geofractal.batch.inspect import inspect_path
        from geofractal.progress import make_progress

        progress = make_progress("none" if quiet else style, details=verbose)
        found = inspect_path(path, progress=progress)
        _print([_json(found.as_dict())] if as_json else found.lines())
        if starter is not None:
            from geofractal.batch.starter import write_starter

            write_starter(starter, found.layers)


@cli.command(epilog=EXIT_CODES)
@click.argument("names", nargs=-1)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
@_shared
def measures(names: tuple[str, ...], *, as_json: bool, quiet: bool, verbose: bool) -> None:
    """List what can be measured; with NAMES, describe those measures."""
    with _plain_errors(quiet=quiet, verbose=verbose):
        from geofractal import describe
        from geofractal.registry import load_any_measure, load_measures

        found = [load_any_measure(name) for name in names] or list(load_measures().values())
        if as_json:
            _print([_json([describe.as_dict(measure) for measure in found])])
        elif names:
            _print(line for measure in found for line in describe.as_lines(measure))
        else:
            _print(f"{measure.name:24} {measure.title}" for measure in found)


@cli.command(epilog=EXIT_CODES)
@click.argument("source", type=FILE, required=False)
@click.option("--layer", help="The layer of SOURCE, where it holds several.")
@click.option("--crs", help="CRS of a SOURCE that states none.")
@click.option("--dimension", "dimensions", type=float, multiple=True, help="Dimension to draw; repeatable.")
@click.option("--vertices", type=int, multiple=True, help="Vertices of a curve; repeatable.")
@click.option("--curves", type=int, help="Curves of each family, dimension and size.")
@click.option("--ruler-min-share", type=float, help="First ruler as a share of a curve's extent.")
@click.option("--ruler-max-share", type=float, help="Last ruler as a share of a curve's extent.")
@click.option("--rungs", type=int, help="Number of rulers.")
@click.option("--table", type=FILE, metavar="FILE", help="Also write the table as CSV.")
@click.option("--figure", type=FILE, metavar="FILE", help="Also draw the intervals as SVG.")
@_with_progress
@_shared
def calibrate(
    source: Path | None,
    layer: str | None,
    crs: str | None,
    table: Path | None,
    figure: Path | None,
    style: Any,
    *,
    quiet: bool,
    verbose: bool,
    **asked: Any,
) -> None:
    """Measure curves of known dimension and tell how right the figures are.

    The curves are like the lines of SOURCE, or as the options say: bias, spread, coverage of the interval
    and errors of the verdict, before any figure is trusted.
    """
    from geofractal.interrupt import guarded

    with _plain_errors(quiet=quiet, verbose=verbose), guarded():
        from geofractal.batch.calibrate import calibrate_layer
        from geofractal.calibration import Settings
        from geofractal.calibration import calibrate as calibrate_stated
        from geofractal.progress import make_progress
        from geofractal.writer import publish

        settings = Settings(**{key: value for key, value in asked.items() if value not in (None, ())})
        progress = make_progress("none" if quiet else style, details=verbose)
        with progress.stage("calibration", "curves of known dimension", 100, "percent") as stage:

            def tell(share: float) -> None:
                stage.advance(round(100 * share) - stage.done)

            if source is None:
                found = calibrate_stated(settings, progress=tell)
            else:
                found = calibrate_layer(source, settings, layer=layer, crs=crs, progress=tell)
        _print(found.lines())
        for target, text in ((table, found.csv), (figure, found.figure)):
            if target is not None:
                with publish(target) as part:
                    part.write_text(text(), encoding="utf-8")


@cli.command(epilog=EXIT_CODES)
@click.argument("file", type=FILE, required=False)
@_shared
def schema(file: Path | None, *, quiet: bool, verbose: bool) -> None:
    """Print the JSON Schema of batch files, or write it to FILE.

    It covers every installed measure; editors complete and check by it.
    """
    with _plain_errors(quiet=quiet, verbose=verbose):
        from geofractal.config import json_schema
        from geofractal.errors import OutputError

        text = _json(json_schema())
        if file is None:
            _print([text])
            return
        try:
            file.write_text(text + "\n", encoding="utf-8")
        except OSError as error:
            raise OutputError(f"{file}: cannot be written: {error.strerror}") from error


def main() -> None:
    """Run the command line."""
    cli(prog_name="geofractal")


@contextmanager
def _plain_errors(*, quiet: bool, verbose: bool) -> Iterator[None]:
    """Turn errors into one plain message and an exit code, and warnings into lines."""

    def show(message: Warning | str, *_: Any, **__: Any) -> None:
        if not quiet:
            click.echo(f"Warning: {message}", err=True)

    with warnings.catch_warnings():
        warnings.simplefilter("default" if verbose else "ignore")
        warnings.simplefilter("always", GeofractalWarning)
        warnings.showwarning = show
        try:
            yield
        except GeofractalError as error:
            _fail(str(error), error.exit_code, error, verbose=verbose)
        except (click.exceptions.Exit, click.ClickException, BrokenPipeError):
            raise
        except KeyboardInterrupt:
            click.echo("\nInterrupted.", err=True)
            sys.exit(130)
        except Exception as error:  # noqa: BLE001 - the last place where an internal error can be told plainly
            said = f"Internal error: {type(error).__name__}: {error}"
            hint = "" if verbose else "\nPlease report it with what --verbose shows."
            _fail(said + hint, 4, error, verbose=verbose)


def _fail(message: str, code: int, error: Exception, *, verbose: bool) -> None:
    if verbose:
        import traceback

        click.echo("".join(traceback.format_exception(error)), err=True)
    click.echo(message if message.startswith("Internal") else f"Error: {message}", err=True)
    sys.exit(code)


def _summary(record: dict[str, Any]) -> Iterator[str]:
    """Yield what came of each measure, and of each layer that could not be read."""
    for name, layer in record["layers"].items():
        for tally in layer["measures"]:
            asked = tally["rows"] - tally["left_out_by_where"]
            said = f"{tally['answered']:,} of {asked:,} rows have figures"
            if tally["refused_by_reason"]:
                said += f"; without figure: {_reasons(tally['refused_by_reason'])}"
            for what in ("polygons", "barriers"):
                if left_out := tally.get(f"{what}_left_out"):
                    said += f"; {what} left out: {_reasons(left_out)}"
            prefix = f" ({tally['prefix']})" if tally["prefix"] else ""
            yield f"{name}: {tally['measure']}{prefix}: {said}"
    for name, reason in record["failed_layers"].items():
        yield f"{name}: not measured: {reason}"


def _reasons(counts: dict[str, int]) -> str:
    reasons = [f"{reason} ({count:,})" for reason, count in counts.items()]
    further = len(reasons) - 3
    more = [f"and {further} other reason{'s' * (further > 1)}"] if further > 0 else []
    return "; ".join(reasons[:3] + more)


def _json(value: Any) -> str:
    import json

    return json.dumps(value, indent=2, ensure_ascii=False)


def _print(lines: Iterable[str]) -> None:
    for line in lines:
        click.echo(line)


if __name__ == "__main__":
    main()
