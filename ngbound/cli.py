"""The command line: it parses, calls one function, and prints the text that comes back.

May import errors and the public names of ngbound, which are loaded only when a verb needs them, so
that ``ngbound --help`` stays quick.
"""

import functools
import json
import math
import sys
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any, NoReturn

import click

import ngbound as ng
from ngbound.errors import NgboundError, NgboundWarning

INTERRUPTED = 130
"""Exit status after Ctrl-C, as shells have it (128 + SIGINT)."""


GO_ON = {
    "sweep": "the same command goes on with the cases that have no record yet",
    **{
        verb: f"with --checkpoint FILE the same command goes on from the {what} kept there"
        for verb, what in (("run", "chain"), ("limit", "chain"), ("inject", "counts"))
    },
}
"""What to do after an interruption, where it is not to begin anew."""


class Verbs(click.Group):
    """The group of verbs; every expected failure of a verb becomes a sentence and a status."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """The verbs in the order of the work, as they stand in this file."""
        return list(self.commands)

    def invoke(self, ctx: click.Context) -> Any:
        try:
            with warnings.catch_warnings():
                warnings.showwarning = _show_warning
                return super().invoke(ctx)
        except NgboundError as error:
            _end(ctx, str(error), error.exit_status)
        except BrokenPipeError:
            raise
        except OSError as error:
            name = f"{error.filename}: " if error.filename else ""
            reason = error.strerror or str(error)
            _end(ctx, f"{name}{reason}; choose a place that can be read and written.", 1)
        except MemoryError:
            _end(
                ctx,
                "There is not enough memory for this analysis; try a shorter arc, or fewer "
                "[sampling] walkers and max_steps.",
                1,
            )
        except click.UsageError as error:
            path = error.ctx.command_path if error.ctx else "ngbound"
            text = error.format_message()
            text += "" if text.endswith((".", "?")) else "."
            _end(ctx, f"{text} See {path} --help.", error.exit_code)
        except KeyboardInterrupt:
            again = GO_ON.get(ctx.invoked_subcommand or "", "the same command begins anew")
            _end(ctx, f"Interrupted, nothing half-written is left; {again}.", INTERRUPTED)


def _end(ctx: click.Context, sentence: str, status: int) -> NoReturn:
    """End the program with a sentence on stderr."""
    click.echo(f"ngbound: {sentence}", err=True)
    ctx.exit(status)


def _show_warning(
    message: Warning | str,
    category: type[Warning],
    filename: str,
    lineno: int,
    file: Any = None,
    line: str | None = None,
) -> None:
    """Warnings of ngbound as a sentence, all others as Python shows them, on stderr."""
    if issubclass(category, NgboundWarning):
        text = f"ngbound: warning: {message}"
    else:
        text = warnings.formatwarning(message, category, filename, lineno, line).rstrip()
    click.echo(text, err=True)


def _finite(value: Any) -> Any:
    """The same JSON-able value with null where a number is not finite (JSON has no NaN)."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def _print(result: Any, as_json: bool) -> None:
    """Print a result as text, or as one JSON document."""
    if as_json:
        click.echo(json.dumps(_finite(result.to_dict()), indent=2, allow_nan=False))
    else:
        click.echo(str(result))


def _step(help_text: str, **settings: Any) -> Callable[[Callable[..., Any]], click.Command]:
    """Register a verb that works on a case file or an arc, with the options all of them have."""

    def register(function: Callable[..., Any]) -> click.Command:
        @functools.wraps(function)
        def verb(input_file: Path, as_json: bool, progress: bool | None, **options: Any) -> None:
            show = sys.stderr.isatty() if progress is None else progress
            _print(function(input_file, progress=show, **options), as_json)

        command = click.argument("input_file", metavar="INPUT", type=click.Path(path_type=Path))(
            verb
        )
        command = click.option(
            "--json", "as_json", is_flag=True, help="Print one JSON document instead of text."
        )(command)
        command = click.option(
            "--progress/--no-progress",
            default=None,
            help="Show progress on stderr; by default only on a terminal.",
        )(command)
        return main.command(help=help_text, **settings)(command)

    return register


LAW = click.option("--law", metavar="LAW", help="Thrust law, instead of the one in the case file.")
COMPONENTS = click.option(
    "--components", metavar="RTN", help="Free thrust components, any of R, T, N in this order."
)
CHECKPOINT = click.option(
    "--checkpoint",
    type=click.Path(path_type=Path, dir_okay=False),
    help="File that keeps the long part of the work (chain or counts), so that an interrupted run "
    "goes on from there.",
)
SEED = click.option(
    "--seed", type=click.IntRange(min=0), help="Seed of every random number of the analysis."
)
OBJECT = click.option(
    "--object", "object_name", metavar="NAME", help="Which object, when the arc holds several."
)


@click.group(cls=Verbs, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(ng.__version__, prog_name="ngbound")
def main() -> None:
    """Find out how large a non-gravitational acceleration an arc of astrometry would have shown,
    and what mass that demands.

    INPUT is a case file (TOML), or an arc of observations (ADES PSV, ADES XML, 80-column or JSON),
    for which every choice then has its default.

    The exit status is 0 when the work was done, 1 when the analysis could not be done, and 2 when
    the input or the usage is wrong; the reason is one sentence on stderr.
    """


@_step(
    "Do the whole job, from the arc to the record.\n\n"
    "The orbit is fitted with and without thrust; detection threshold, upper limits and mass bound "
    "follow, with report, figures and a machine-readable record.\n\n"
    "The results go into the output folder of the case, the record last, so that an interrupted "
    "run leaves no half-written record.\n\n"
    "Example: ngbound run data_demo/quiet.toml",
    name="run",
)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    help="Output folder, instead of the one in the case file.",
)
@CHECKPOINT
@SEED
@LAW
@COMPONENTS
@OBJECT
def run(input_file: Path, **options: Any) -> Any:
    return ng.run_case(input_file, **options)


@_step(
    "Tell what is in an arc at a glance.\n\n"
    "Stations, catalogues, span, gaps, stated and implied errors, and whatever is doubtful.\n\n"
    "Example: ngbound inspect data_demo/quiet.psv",
    name="inspect",
)
@OBJECT
def inspect(input_file: Path, **options: Any) -> Any:
    return ng.inspect_case(input_file, **options)


@_step(
    "Fit with and without thrust, and compare.\n\n"
    "The first orbit is found from the angles, unless the case file gives one.\n\n"
    "Example: ngbound fit data_demo/pushed.psv --components RT",
    name="fit",
)
@LAW
@COMPONENTS
@OBJECT
def fit(input_file: Path, **options: Any) -> Any:
    return ng.fit_case(input_file, **options)


@_step(
    "State detection threshold and upper limit.\n\n"
    "The threshold is what the arc would have shown, the limit what its data allow.\n\n"
    "Example: ngbound limit data_demo/quiet.psv --seed 7 --vary",
    name="limit",
)
@click.option(
    "--vary",
    "vary_errors",
    is_flag=True,
    help="Also state both under a small set of other defensible error models.",
)
@CHECKPOINT
@SEED
@LAW
@COMPONENTS
@OBJECT
def limit(input_file: Path, **options: Any) -> Any:
    return ng.limit_case(input_file, **options)


@_step(
    "State the mass that the limit demands.\n\n"
    "The outgassing budget stands in the case file, in one [[outgassing]] table for each "
    "species; a [reach] table asks which rate the arc would have revealed.\n\n"
    "Example: ngbound mass data_demo/quiet.toml",
    name="mass",
)
@SEED
@LAW
@COMPONENTS
@OBJECT
def mass(input_file: Path, **options: Any) -> Any:
    return ng.mass_case(input_file, **options)


@_step(
    "Draw the residual fan into a file.\n\n"
    "Residuals along and across the motion, with the departures that a ladder of accelerations "
    "would have left.\n\n"
    "Example: ngbound fan data_demo/quiet.toml -o fan.pdf",
    name="fan",
)
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    default=Path("residual_fan.png"),
    show_default=True,
    help="File of the figure; the ending tells the format.",
)
@LAW
@COMPONENTS
@OBJECT
def fan(input_file: Path, **options: Any) -> Any:
    return ng.fan_case(input_file, **options)


@_step(
    "Try the arc's own detection test with invented thrusts.\n\n"
    "Thrusts of several sizes are added to the fitted orbit, observed at the arc's own times with "
    "fresh noise, and fitted again: how often each is found, the false alarms, the bias. Sizes and "
    "counts stand in the [injection] table of the case.\n\n"
    "Example: ngbound inject data_demo/quiet.toml",
    name="inject",
)
@CHECKPOINT
@SEED
@LAW
@COMPONENTS
@OBJECT
def inject(input_file: Path, **options: Any) -> Any:
    return ng.inject_case(input_file, **options)


@_step(
    "Foresee what planned nights would do to the threshold.\n\n"
    "The nights stand in [[planned]] tables of the case file.\n\n"
    "Example: ngbound forecast data_demo/forecast.toml",
    name="forecast",
)
@click.option(
    "--acceleration",
    "acceleration_au_d2",
    type=click.FloatRange(min=0.0, min_open=True),
    metavar="AU_D2",
    help="Also say from when on a thrust of this size, au/d2, would be detected.",
)
@LAW
@COMPONENTS
@OBJECT
def forecast(input_file: Path, **options: Any) -> Any:
    return ng.forecast_case(input_file, **options)


def _desk(name: str, help_text: str, function: str, short: str | None = None) -> None:
    """Register a verb of the referee's desk: one TOML file of quoted numbers in, text out."""

    @main.command(name=name, help=help_text, short_help=short)
    @click.argument("quoted", metavar="QUOTED.toml", type=click.Path(path_type=Path))
    @click.option(
        "--json", "as_json", is_flag=True, help="Print one JSON document instead of text."
    )
    def verb(quoted: Path, as_json: bool) -> None:
        _print(getattr(ng, function)(quoted), as_json)


_desk(
    "audit",
    "Test quoted numbers against one another and against their arc.\n\n"
    "QUOTED.toml holds [numbers], and, where known, [threshold], [arc], [errors] or [geometry].\n\n"
    "Example: ngbound audit data_demo/desk/audit.toml",
    "audit",
)
_desk(
    "reconcile",
    "Say what would have to be true for two or more results to hold together.\n\n"
    "QUOTED.toml holds two or more [[result]] tables, of quoted numbers or with their arcs.\n\n"
    "Example: ngbound reconcile data_demo/desk/reconcile.toml",
    "reconcile",
    "Say what lets two or more results hold together.",
)


@main.command(
    name="simulate",
    help="Make an invented arc from a recipe.\n\n"
    "The recipe is a TOML file; the arc is written as ADES PSV.\n\n"
    "Example: ngbound simulate data_demo/quiet_recipe.toml -o quiet.psv",
)
@click.argument("recipe", metavar="RECIPE", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Arc file to write; the name of the recipe with the ending .psv unless given.",
)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON document instead of text.")
def simulate(recipe: Path, output: Path | None, as_json: bool) -> None:
    _print(ng.simulate_arc(recipe, output=output), as_json)


@main.command(
    name="sweep",
    help="Run many cases, and put their results into one table.\n\n"
    "CASES are case files, or folders of them. Cases whose record stands, made from the same "
    "inputs, are not run anew, so an interrupted sweep goes on where it was. The exit status is 1 "
    "when a case could not be done.\n\n"
    "Example: ngbound sweep data_demo --table results.csv",
)
@click.argument(
    "cases", metavar="CASES...", nargs=-1, required=True, type=click.Path(path_type=Path)
)
@click.option(
    "--workers", type=click.IntRange(min=1), help="Processes at a time; one a core unless given."
)
@click.option(
    "--part",
    default="1/1",
    show_default=True,
    help="Which part of the cases, as 2/8: for cluster nodes.",
)
@click.option(
    "--table",
    type=click.Path(path_type=Path, dir_okay=False),
    help="CSV file for the table of results.",
)
@click.option("--again", is_flag=True, help="Run cases anew even where their record stands.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON document instead of text.")
@click.option(
    "--progress/--no-progress",
    default=None,
    help="Show progress on stderr; by default only on a terminal.",
)
@click.pass_context
def sweep(
    ctx: click.Context,
    cases: tuple[Path, ...],
    as_json: bool,
    progress: bool | None,
    **options: Any,
) -> None:
    show = sys.stderr.isatty() if progress is None else progress
    result = ng.sweep_cases(cases, progress=show, **options)
    _print(result, as_json)
    if result.n_failed:
        ctx.exit(1)
