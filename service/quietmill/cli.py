"""The commands. Exit codes: 0 done, 1 the work failed, 2 bad usage or bad settings."""

import sys
from io import TextIOWrapper
from pathlib import Path
from typing import Any

import click

from quietmill import __version__
from quietmill.settings import Settings, SettingsError, load

__all__ = ["main"]

CONFIG = click.argument("config", type=click.Path(path_type=Path))
RIGHT_WIDTH = 100


class Seconds(click.ParamType):
    """A duration on the command line: `60s`, `5m`, `8h`, or a number of seconds."""

    name = "duration"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        """Return the duration in seconds."""
        if isinstance(value, float):
            return value
        text = str(value).strip()
        factor = {"s": 1, "m": 60, "h": 3600, "d": 86400}.get(text[-1:])
        try:
            seconds = float(text if factor is None else text[:-1]) * (factor or 1)
        except ValueError:
            seconds = -1
        if not 0 < seconds < float("inf"):
            self.fail(f"{text!r} is not a duration; write a number and s, m, h or d, such as 60s", param, ctx)
        return seconds


def read_settings(config: Path, overrides: tuple[str, ...] = ()) -> Settings:
    """Load the settings, or print everything that is wrong with them and end with 2."""
    try:
        return load(config, overrides)
    except SettingsError as error:
        for problem in error.problems:
            click.echo(str(problem), err=True)
        count = len(error.problems)
        click.echo(f"{count} problem{'s' * (count != 1)} in the settings; nothing was started.", err=True)
        sys.exit(2)


def show(what: Any) -> None:
    """Print tables to fit the terminal; where there is none, every line whole."""
    from rich.console import Console

    console = Console(highlight=False)
    console.print(what, soft_wrap=not console.is_terminal)


@click.group(context_settings={"max_content_width": RIGHT_WIDTH, "help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="quietmill", message="%(prog)s %(version)s")
def main() -> None:
    """Listen to the sensors of a plant over MQTT and speak only when a process has really changed.

    \b
    Start here:   quietmill demo --for 60s
    Your plant:   quietmill check plant.yaml && quietmill run plant.yaml

    quietmill informs people; it is no safety function.
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):  # a terminal without the trade's letters shows a mark for each
            stream.reconfigure(errors="replace")


@main.command()
@CONFIG
def run(config: Path) -> None:
    """Run the service until SIGTERM or Ctrl-C; SIGHUP reads the settings again.

    \b
    Example:   quietmill run config/minimal.yaml
    """
    from quietmill.logs import set_up_logs
    from quietmill.monitor import ServiceError, StartError, run_service

    settings = read_settings(config)
    set_up_logs()
    try:
        run_service(settings)
    except StartError as error:
        click.echo(f"quietmill did not start: {error}", err=True)
        sys.exit(1)
    except ServiceError as error:
        click.echo(f"quietmill has stopped: {error}", err=True)
        sys.exit(1)


@main.command()
@CONFIG
def check(config: Path) -> None:
    """Say what would run, a line a characteristic, or what is wrong.

    \b
    Example:   quietmill check config/tileworks.yaml
    """
    from quietmill.settings.describe import describe

    show(describe(read_settings(config)))


@main.command()
@CONFIG
@click.argument("data", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--points", type=click.Path(path_type=Path), metavar="FILE.csv", help="Write a line per point.")
@click.option("--signals", type=click.Path(path_type=Path), metavar="FILE.jsonl", help="Write an event per line.")
@click.option("--set", "overrides", multiple=True, metavar="ID.KEY=VALUE", help="Try another setting. Repeatable.")
@click.option("--strict", is_flag=True, help="End with 1 if any row was bad.")
@click.option("--wide", is_flag=True, help="One column a characteristic, `time` first.")
def replay(
    config: Path,
    data: tuple[Path, ...],
    points: Path | None,
    signals: Path | None,
    overrides: tuple[str, ...],
    strict: bool,
    wide: bool,
) -> None:
    """Judge history with the engine that judges live readings.

    DATA is CSV with the columns time, characteristic, value.

    \b
    Example:   quietmill replay plant.yaml march.csv --signals march.jsonl
               quietmill replay plant.yaml march.csv --set press1.force.cusum.h=6
    """
    from quietmill.study.columns import DataError
    from quietmill.study.progress import progress_over
    from quietmill.study.replay import replay as replay_history

    settings = read_settings(config, overrides)
    try:
        with progress_over(data) as progress:
            replayed = replay_history(settings, data, points=points, signals=signals, wide=wide, progress=progress)
    except DataError as error:
        click.echo(str(error), err=True)
        sys.exit(1)
    show(replayed.report())
    if strict and replayed.refused:
        sys.exit(1)


@main.command()
@click.option("--for", "duration", type=Seconds(), metavar="60s", help="How long; without it until Ctrl-C.")
@click.option(
    "--pace",
    type=click.FloatRange(0.1, 1000),
    default=5.0,
    show_default=True,
    help="Points a second, of each characteristic.",
)
@click.option("--seed", type=int, default=1, show_default=True, help="The same seed gives the same plant and faults.")
def demo(duration: float | None, pace: float, seed: int) -> None:
    """Watch the service find faults planted in a simulated tile works.

    A broker, the plant and the real service, with no other program.

    \b
    Example:   quietmill demo --for 60s
    """
    from quietmill.demo.run import run_demo

    sys.exit(run_demo(duration, pace, seed))
