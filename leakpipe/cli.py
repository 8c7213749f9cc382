"""The commands: each reads its arguments, calls one function and prints.

Imports of numerical libraries happen inside the commands, so that `--help` answers at once.
People's text goes to stderr or the terminal, machine output (`--json`) to stdout. Exit codes:
0 done, 1 unexpected, 2 config or usage, 3 recordings unusable, 4 done with findings of severity
"act" (with `--flag-exit`), 130 interrupted.
"""

from __future__ import annotations

import json
import signal
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from leakpipe import __version__
from leakpipe.console import reporter_for
from leakpipe.errors import LeakpipeError

if TYPE_CHECKING:
    from collections.abc import Callable

    from leakpipe.config.models import Config

EXIT_FLAGGED = 4
EXIT_INTERRUPTED = 130


def main() -> None:
    """Run the command line and exit with the documented code."""
    interrupted = _remember_interrupt()
    try:
        code = commands.main(standalone_mode=False)
    except (click.exceptions.Abort, KeyboardInterrupt):
        code = EXIT_INTERRUPTED
    except click.ClickException as error:
        error.show()
        code = error.exit_code
    except LeakpipeError as error:
        click.echo(str(error), err=True)
        code = error.exit_code
    except Exception:
        # An interruption inside a library's import comes out as that library's own error.
        if not interrupted:
            raise
        code = EXIT_INTERRUPTED
    sys.exit(code if isinstance(code, int) else 0)


def _remember_interrupt() -> list[int]:
    """Note every SIGINT in the list that is returned, and raise KeyboardInterrupt as usual."""
    seen: list[int] = []

    def note(number: int, _frame: object) -> None:
        seen.append(number)
        raise KeyboardInterrupt

    signal.signal(signal.SIGINT, note)
    return seen


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="leakpipe")
def commands() -> None:
    """Leakage of an error-corrected memory: how much, where, how fast, and what it costs."""


def _config_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add the options that every command with a CONFIG shares."""
    folder = click.Path(path_type=Path, file_okay=False)
    options = [
        click.argument("config", type=click.Path(path_type=Path)),
        click.option("--recordings", type=folder, help="Read recordings from this folder."),
        click.option("--out", type=folder, help="Write results into this folder."),
        click.option(
            "--set",
            "settings",
            multiple=True,
            metavar="KEY=VALUE",
            help="Replace one setting, such as rates.boundary_rounds=2. May be repeated.",
        ),
        click.option("--quiet", is_flag=True, help="No progress on stderr."),
        click.option("--json", "as_json", is_flag=True, help="Machine output on stdout."),
    ]
    for option in reversed(options):
        command = option(command)
    return command


def _load(
    config: Path, recordings: Path | None, out: Path | None, settings: tuple[str, ...]
) -> Config:
    from leakpipe.config.loading import load

    return load(config, settings, recordings=recordings, out=out)


@commands.command()
@_config_options
@click.option("--flag-exit", is_flag=True, help='Exit with 4 if a finding says "act".')
def run(
    config: Path,
    recordings: Path | None,
    out: Path | None,
    settings: tuple[str, ...],
    quiet: bool,
    as_json: bool,
    flag_exit: bool,
) -> int:
    """Run every epoch of the recordings and write its result folder."""
    loaded = _load(config, recordings, out, settings)
    from leakpipe.pipeline import run_all

    results = run_all(loaded, reporter_for(quiet=quiet))
    if as_json:
        click.echo(json.dumps([result.summary for result in results], indent=1))
    else:
        for result in results:
            click.echo(result.block)
            click.echo(f"page     {result.folder / 'page.html'}")
            click.echo(f"figures  {result.folder / 'figures'}")
    flagged = any(result.flagged for result in results)
    return EXIT_FLAGGED if flag_exit and flagged else 0


@commands.command()
@_config_options
def check(
    config: Path,
    recordings: Path | None,
    out: Path | None,
    settings: tuple[str, ...],
    quiet: bool,
    as_json: bool,
) -> int:
    """Check the config and the recordings; say what would run. Nothing is written."""
    loaded = _load(config, recordings, out, settings)
    from leakpipe.preview import preview

    plan = preview(loaded)
    click.echo(json.dumps(plan.to_json(), indent=1) if as_json else plan.text())
    return 0


@commands.command()
@click.argument("scenario", type=click.Path(path_type=Path))
@click.argument("out", type=click.Path(path_type=Path, file_okay=False))
@click.option("--keep", is_flag=True, help="Do nothing if OUT already holds this scenario.")
@click.option("--quiet", is_flag=True, help="No progress on stderr.")
def rehearse(scenario: Path, out: Path, keep: bool, quiet: bool) -> int:
    """Make synthetic recordings with a known truth (written beside them)."""
    from leakpipe.rehearsal.scenario import load_scenario
    from leakpipe.rehearsal.write import rehearse as make
    from leakpipe.rehearsal.write import up_to_date

    loaded = load_scenario(scenario)
    if keep and up_to_date(loaded, out):
        click.echo(f"{out} already holds this scenario", err=True)
        return 0
    make(loaded, out, reporter_for(quiet=quiet))
    return 0


@commands.command()
@_config_options
@click.option("--every", metavar="TIME", help="Keep running, a pass every TIME, such as 15m.")
@click.option("--rebuild", is_flag=True, help="First rebuild the history from the result folders.")
def refit(
    config: Path,
    recordings: Path | None,
    out: Path | None,
    settings: tuple[str, ...],
    quiet: bool,
    as_json: bool,
    every: str | None,
    rebuild: bool,
) -> int:
    """Make every result that is new or stale. Safe from a timer, twice at once, after a kill."""
    loaded = _load(config, recordings, out, settings)
    from leakpipe.history.duration import seconds
    from leakpipe.refit import refit as one_pass
    from leakpipe.refit import repeat, standard_tools, stop_on_signals

    if rebuild:
        from leakpipe.history.publish import store_of

        for problem in store_of(loaded.results).rebuild(loaded.results):
            click.echo(problem, err=True)
    reporter = reporter_for(quiet=quiet)
    tools = standard_tools()
    with stop_on_signals() as stop:
        if every is not None:
            repeat(
                lambda: one_pass(loaded, tools, reporter, stop=stop),
                seconds(every),
                stop,
                lambda text: click.echo(text, err=True),
            )
            return 0
        done = one_pass(loaded, tools, reporter, stop=stop)
    if as_json:
        click.echo(json.dumps(done.to_json(), indent=1))
    elif said := done.news() if quiet else done.text():
        click.echo(said)
    return EXIT_INTERRUPTED if done.stopped else done.exit_code


@commands.command()
@_config_options
@click.option("--quantity", help="Only this quantity, such as steady_leakage, for every qubit.")
@click.option("--qubit", help="Only this qubit, epoch by epoch.")
@click.option("--patch", help="Only this patch.")
@click.option("--since", metavar="CALIBRATION", help="Only epochs from this calibration on.")
@click.option("--epochs", "view", flag_value="epochs", help="List the epochs.")
@click.option("--changes", "view", flag_value="changes", help="Only what changed.")
def log(
    config: Path,
    recordings: Path | None,
    out: Path | None,
    settings: tuple[str, ...],
    quiet: bool,
    as_json: bool,
    quantity: str | None,
    qubit: str | None,
    patch: str | None,
    since: str | None,
    view: str | None,
) -> int:
    """Show the history: what is known, how it moved, what changed."""
    loaded = _load(config, recordings, out, settings)
    from leakpipe.history.log import log as history

    shown = history(
        loaded,
        view or "overview",
        qubit=qubit,
        quantity=quantity,
        patch=patch,
        since=since,
        as_json=as_json,
    )
    click.echo(json.dumps(shown, indent=1) if as_json else shown)
    return 0
