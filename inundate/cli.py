"""The command line: options in, one call of ``batch``, a summary out. Heavy libraries are imported inside commands."""

from __future__ import annotations

import json
import os
import sys
import traceback
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from inundate import __version__
from inundate.common.errors import InundateError

_Command = Callable[..., Any]
_KINDS = ("scene", "wetland", "logger", "check", "label", "row")
_SHOWN = 10


class _Group(click.Group):
    """A group whose failures end with the documented exit status and one clear sentence."""

    def main(self, *args: Any, **kwargs: Any) -> Any:
        """Run; bad use ends with status 2."""
        kwargs["standalone_mode"] = False
        try:
            status = super().main(*args, **kwargs)
        except click.exceptions.Exit as err:
            status = err.exit_code
        except click.ClickException as err:
            err.show()
            status = 2
        except click.Abort:
            click.echo("stopped by the user; nothing half-written, run again to go on", err=True)
            status = 130
        sys.exit(status if isinstance(status, int) else 0)


def _guarded(work: Callable[[], int], debug: bool) -> int:
    """Run a command's work and turn errors into exit statuses."""
    try:
        return work()
    except InundateError as err:
        if debug:
            traceback.print_exc()
        click.echo(f"inundate: {err}", err=True)
        return 2
    except KeyboardInterrupt:
        click.echo("inundate: stopped by the user; nothing half-written, run again to go on", err=True)
        return 130
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as err:
        if debug:
            traceback.print_exc()
        click.echo(
            f"inundate: internal fault: {type(err).__name__}: {err}; run again with --debug and report what it prints",
            err=True,
        )
        return 3


def _common(command: _Command) -> _Command:
    """Add the options that every command has."""
    command = click.option("--json", "as_json", is_flag=True, help="Print results as JSON on stdout.")(command)
    command = click.option("--quiet", is_flag=True, help="No progress lines.")(command)
    return click.option("--debug", is_flag=True, help="Show the traceback of a failure.")(command)


def _end(result: dict[str, Any], as_json: bool, lines: list[str]) -> int:
    """Print a result; status 1 when something was refused."""
    refused = result.get("refused", [])
    if as_json:
        click.echo(json.dumps(result, indent=2, sort_keys=True, ensure_ascii=False))
    else:
        for line in lines:
            click.echo(line)
    shown: dict[str, int] = {}
    for item in sorted(refused, key=lambda r: _KINDS.index(r["kind"]) if r["kind"] in _KINDS else len(_KINDS)):
        kind = item["kind"]
        shown[kind] = shown.get(kind, 0) + 1
        if shown[kind] <= _SHOWN:
            click.echo(f"refused {kind} {item['name']}: {item['reason']}", err=True)
    for kind, count in shown.items():
        if count > _SHOWN:
            click.echo(f"... and {count - _SHOWN} more of kind {kind} refused, all in run.json", err=True)
    return 1 if refused else 0


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 110})
@click.version_option(__version__, prog_name="inundate")
def main() -> None:
    """Daily inundated area with honest uncertainty for every wetland of a landscape.

    Exit status: 0 done; 1 done with scenes, wetlands or rows refused (named); 2 the input or command is wrong; 3 an
    internal fault. Not for flood safety, legal wetland boundaries or decisions about work on water or ice.
    """


@main.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--seed", default=1, show_default=True, help="Another seed makes another reserve.")
@click.option("--size", type=click.Choice(["default", "small"]), default="default", show_default=True)
@_common
def demo(folder: Path, seed: int, size: str, as_json: bool, quiet: bool, debug: bool) -> int:
    """Make the invented Sallow Reserve in FOLDER, run the whole job on it, and score it against the known truth."""

    def work() -> int:
        from inundate.batch.demo import run_demo, summary_lines
        from inundate.batch.progress import Progress

        result = run_demo(folder, seed=seed, size=size, progress=Progress(quiet=quiet))
        return _end(result, as_json, summary_lines(result))

    return _guarded(work, debug)


@main.command()
@click.argument("pipeline", type=click.Path(path_type=Path))
@click.option("--why", is_flag=True, help="Also tell what the next run would do, and why.")
@_common
def check(pipeline: Path, why: bool, as_json: bool, quiet: bool, debug: bool) -> int:
    """Read a pipeline file and all its inputs; tell what is there, what is missing, what is odd. Changes nothing."""

    def work() -> int:
        from inundate.batch.checking import check_lines, check_pipeline
        from inundate.batch.progress import Progress

        result = check_pipeline(pipeline, why=why, progress=Progress(quiet=quiet))
        return _end(result, as_json, check_lines(result))

    return _guarded(work, debug)


@main.command()
@click.argument("pipeline", type=click.Path(path_type=Path))
@_common
def train(pipeline: Path, as_json: bool, quiet: bool, debug: bool) -> int:
    """Read what is new and train the water classifier."""

    def work() -> int:
        from inundate.batch.progress import Progress
        from inundate.batch.run import run_lines, train_only

        result = train_only(pipeline, progress=Progress(quiet=quiet))
        return _end(result, as_json, run_lines(result))

    return _guarded(work, debug)


@main.command()
@click.argument("pipeline", type=click.Path(path_type=Path))
@click.option("--month", metavar="YYYY-MM", help="Month to deliver; default: the last month of the data.")
@_common
def run(pipeline: Path, month: str | None, as_json: bool, quiet: bool, debug: bool) -> int:
    """Do everything new since last time, through the month's products."""

    def work() -> int:
        from inundate.batch.progress import Progress
        from inundate.batch.run import run_lines, run_month

        result = run_month(pipeline, month=month, progress=Progress(quiet=quiet))
        return _end(result, as_json, run_lines(result))

    return _guarded(work, debug)


@main.command()
@click.argument("pipeline", type=click.Path(path_type=Path))
@click.option("--month", metavar="YYYY-MM", help="Delivery to show; default: the newest.")
@_common
def skill(pipeline: Path, month: str | None, as_json: bool, quiet: bool, debug: bool) -> int:
    """Show the skill of a delivery against the field."""

    def work() -> int:
        from inundate.batch.progress import Progress
        from inundate.batch.reporting import show_skill, skill_lines

        result = show_skill(pipeline, month=month, progress=Progress(quiet=quiet))
        return _end(result, as_json, skill_lines(result))

    return _guarded(work, debug)


@main.command()
@click.argument("pipeline", type=click.Path(path_type=Path))
@click.option("--month", metavar="YYYY-MM", help="Delivery to report; default: the newest.")
@click.option("--figures", is_flag=True, help="Also write static figures (PNG and SVG) for papers.")
@_common
def report(pipeline: Path, month: str | None, figures: bool, as_json: bool, quiet: bool, debug: bool) -> int:
    """Write the report page of a delivery again, from its products."""

    def work() -> int:
        from inundate.batch.progress import Progress
        from inundate.batch.reporting import report_lines, write_report_again

        result = write_report_again(pipeline, month=month, figures=figures, progress=Progress(quiet=quiet))
        return _end(result, as_json, report_lines(result))

    return _guarded(work, debug)


if __name__ == "__main__":
    main()
