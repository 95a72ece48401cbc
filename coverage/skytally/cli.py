"""The command line: parse, call, print, and turn every exception into an exit code.

Data goes to standard output; messages and progress go to standard error.
Heavy modules are imported by the commands that need them, so that help and
usage errors answer at once.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
import traceback
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer
from typer.core import TyperGroup

from skytally import __version__
from skytally.errors import OutputError, SkytallyError, UsageError

if TYPE_CHECKING:
    from skytally.cache import Cache
    from skytally.campaign import LoadedCampaign
    from skytally.footprints import Progress
    from skytally.results import Results

__all__ = ["app", "main"]

EXIT_ERRORS_FOUND = 1
EXIT_INPUT = 2
EXIT_UNEXPECTED = 70  # EX_SOFTWARE of sysexits.h
EXIT_INTERRUPTED = 130
EXIT_TERMINATED = 143

LISTED_FAULTS = 10
SECONDS_BEFORE_BAR = 1.0

_HELP = "Account for completed observations of an event with an uncertain position."
_EPILOG = (
    "Exit codes: 0 done; 1 done, but check found errors, verify found changes or a log could not "
    "be read; "
    "2 bad input or usage; 3 an output could not be made; 70 a fault of skytally itself; "
    "130 stopped by Ctrl-C."
)


class _Commands(TyperGroup):
    """The one place where exceptions become messages and exit codes."""

    def invoke(self, ctx: Any) -> Any:
        try:
            with warnings.catch_warnings():
                if not _debugging():
                    warnings.simplefilter("ignore")
                return super().invoke(ctx)
        except (SkytallyError, OSError, MemoryError, KeyboardInterrupt) as error:
            _show_traceback()
            code, message = _explain(error)
        except Exception as error:
            if isinstance(error, typer.Exit) or _is_usage_error(error):
                raise
            _show_traceback()
            code, message = EXIT_UNEXPECTED, _ask_to_report(error)
        _say(message)
        raise typer.Exit(code)


app = typer.Typer(
    cls=_Commands,
    help=_HELP,
    epilog=_EPILOG,
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)

CampaignPath = Annotated[
    str, typer.Argument(metavar="CAMPAIGN", help="Campaign file (TOML).", show_default=False)
]
OutDir = Annotated[
    Path, typer.Option("--out", "-o", metavar="DIR", help="Folder to write to.", show_default=False)
]
NoCache = Annotated[
    bool,
    typer.Option("--no-cache", help="Lay every footprint anew, and keep nothing for the next run."),
]
MapVersion = Annotated[
    str | None,
    typer.Option("--map", metavar="VERSION", help="Map version; the newest if not given."),
]


def main() -> NoReturn:
    """Run the command line and leave the process with its exit code."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    signal.signal(signal.SIGTERM, _leave)
    try:
        app(prog_name="skytally")
    except KeyboardInterrupt:
        _say("Stopped.")
        _leave_at_once(EXIT_INTERRUPTED)
    except SystemExit as leaving:
        if leaving.code in {EXIT_INTERRUPTED, EXIT_TERMINATED}:
            _leave_at_once(leaving.code)
        raise
    sys.exit(0)


def _leave_at_once(code: Any) -> NoReturn:
    """End the process; the usual way out would wait for threads whose work nobody wants."""
    sys.stderr.flush()
    os._exit(code)


def _leave(number: int, frame: FrameType | None) -> NoReturn:
    # An exception, unlike the default, lets half-made outputs be cleared away.
    raise SystemExit(EXIT_TERMINATED)


def _version(wanted: bool) -> None:
    if wanted:
        _print(f"skytally {__version__}\n")
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_version, is_eager=True, help="Show the version."),
    ] = False,
) -> None:
    pass


@app.command("new")
def new(
    directory: Annotated[
        Path, typer.Argument(metavar="DIR", help="Folder to make.", show_default=False)
    ],
) -> None:
    """Write a commented sample campaign to start from."""
    from skytally.scaffold import write_campaign

    written = write_campaign(directory)
    _say(f"Wrote {len(written)} files to {directory}; change {written[0]} into your own night.")
    _say(f"It runs as it stands: skytally report {written[0]} --out {directory / 'report'}")


@app.command("report")
def report(
    campaign: CampaignPath,
    out: OutDir,
    json: Annotated[bool, typer.Option("--json", help="Print tally.json as well.")] = False,
    templates: Annotated[
        Path | None,
        typer.Option(
            "--templates",
            metavar="DIR",
            help="Folder whose report.html.j2 overrides blocks of the report.",
        ),
    ] = None,
    no_cache: NoCache = False,
) -> None:
    """Write the report and its data files (the main job)."""
    from skytally.house_style import HouseStyle
    from skytally.outputs import write_outputs
    from skytally.paper import open_paper
    from skytally.serialise import to_json
    from skytally.terminal import render_answer

    style = None if templates is None else HouseStyle.read(templates)
    # Its process gets ready while the numbers are made.
    with open_paper() as paper:
        results = _tally(campaign, no_cache, "report.html lists them all")
        with _progress("Writing") as progress:
            written = write_outputs(results, out, progress, style, campaign, paper)
    _print(to_json(results) if json else render_answer(results, sys.stdout))
    _say(f"Wrote {len(written)} files to {out}")
    _leave_if_unread(results)


@app.command("tally")
def tally(
    campaign: CampaignPath,
    map: MapVersion = None,
    json: Annotated[bool, typer.Option("--json", help="Print JSON instead of tables.")] = False,
    no_cache: NoCache = False,
) -> None:
    """Show the numbers on the terminal."""
    from skytally.serialise import select_map, to_json
    from skytally.terminal import render_tally

    results = _tally(campaign, no_cache, "tally --json lists them all")
    if map is not None:
        results = select_map(results, map)
    _print(to_json(results) if json else render_tally(results, sys.stdout))
    _leave_if_unread(results)


@app.command("regions")
def regions(
    campaign: CampaignPath, out: OutDir, map: MapVersion = None, no_cache: NoCache = False
) -> None:
    """Write what each telescope covered as MOC files, and what is left of a map."""
    from skytally.account import account, lay_coverage
    from skytally.leftover import left_overs
    from skytally.outputs import left_over_files, write_regions
    from skytally.terminal import render_left_over

    with _cache(no_cache) as cache, _progress("Reading") as progress:
        loaded = _load(campaign)
        skymap = loaded.map(map)
        coverage = lay_coverage(loaded, progress, cache)
        results = account(loaded, progress, coverage)
        left = left_overs(loaded, coverage, skymap)
    _report_faults(loaded, results, "tally --json lists them all")
    written = write_regions(results, out, left, campaign)
    remaining = {source: one.remaining for source, one in left.items()}
    _print(render_left_over(skymap.label, remaining, left_over_files(left), sys.stdout))
    _say(f"Wrote {len(written)} files to {out}")
    _leave_if_unread(results)


@app.command("check")
def check(
    campaign: CampaignPath,
    json: Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")] = False,
    no_cache: NoCache = False,
) -> None:
    """Say what in the logs, the maps and the stated numbers does not hold."""
    from skytally.check_text import render_check, to_check_json

    _, results = _account(campaign, no_cache)
    _print(to_check_json(results) if json else render_check(results, sys.stdout))
    if any(finding.severity == "error" for finding in results.findings):
        raise typer.Exit(EXIT_ERRORS_FOUND)


@app.command("verify")
def verify(
    directory: Annotated[
        Path,
        typer.Argument(
            metavar="DIR", help="Folder that report or regions wrote.", show_default=False
        ),
    ],
    campaign: Annotated[
        Path | None,
        typer.Option(
            "--campaign", metavar="FILE", help="Campaign file, if it or the folder has moved."
        ),
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")] = False,
) -> None:
    """Say whether a folder's numbers still follow from its inputs, and if not, why."""
    from skytally.verify import verify as verify_folder
    from skytally.verify_text import render_verdict, to_verdict_json

    with _progress("Reading") as progress:
        verdict = verify_folder(directory, campaign, progress)
    _print(to_verdict_json(verdict) if json else render_verdict(verdict, sys.stdout))
    if not verdict.same:
        raise typer.Exit(EXIT_ERRORS_FOUND)


@app.command("where", context_settings={"ignore_unknown_options": True})  # -31:04 is no option
def where(
    campaign: CampaignPath,
    ra: Annotated[
        str | None,
        typer.Argument(metavar="RA", help="Degrees, or hours as 10:21:43.2.", show_default=False),
    ] = None,
    dec: Annotated[
        str | None,
        typer.Argument(metavar="DEC", help="Degrees, or as -31:04:12.", show_default=False),
    ] = None,
    positions: Annotated[
        Path | None,
        typer.Option(
            "--positions",
            metavar="FILE",
            help="Table of positions (name, ra, dec), or of galaxies with distances to be ranked.",
        ),
    ] = None,
    weight: Annotated[
        str | None,
        typer.Option(
            "--weight",
            metavar="BY",
            help="What galaxies weigh beside probability per volume: none, luminosity or mass.",
        ),
    ] = None,
    completeness: Annotated[
        float | None,
        typer.Option(
            "--completeness",
            metavar="C",
            help="Share of all galaxies' weight that the table holds, 0 to 1.",
        ),
    ] = None,
    json: Annotated[bool, typer.Option("--json", help="Print JSON instead of text.")] = False,
    no_cache: NoCache = False,
) -> None:
    """Say which exposures saw a position, how deep, and how probable it is."""
    from skytally.cosmology import Cosmology
    from skytally.footprints import lay_footprints
    from skytally.positions_io import parse_position, read_positions
    from skytally.where import INDEX_ORDER, choose_ranking, look_up
    from skytally.where_json import where_to_json
    from skytally.where_text import render_where

    if (ra is None or dec is None) == (positions is None):
        raise UsageError(
            "expected one position, or a table of them",
            remedy="Give RA and DEC, or --positions FILE.",
        )
    with _cache(no_cache) as cache, _progress("Reading") as progress:
        loaded = _load(campaign)
        if positions is not None:
            cosmology = Cosmology.named(loaded.settings.cosmology)
            asked = read_positions(positions, cosmology)
        else:
            assert ra is not None
            assert dec is not None
            asked = parse_position(ra, dec)
        ranking = choose_ranking(loaded, asked, weight, completeness)
        order = INDEX_ORDER if ranking is None else None
        footprints = lay_footprints(loaded, progress, order, cache)
        answer = look_up(loaded, footprints, asked, ranking)
    _print(where_to_json(answer) if json else render_where(answer, sys.stdout))


def _tally(campaign: str, no_cache: bool, rest: str) -> Results:
    """Load a campaign and account for it, with progress and with the faults of its rows."""
    loaded, results = _account(campaign, no_cache)
    _report_faults(loaded, results, rest)
    return results


def _account(campaign: str, no_cache: bool) -> tuple[LoadedCampaign, Results]:
    from skytally.account import account, lay_coverage

    with _cache(no_cache) as cache, _progress("Reading") as progress:
        loaded = _load(campaign)
        return loaded, account(loaded, progress, lay_coverage(loaded, progress, cache))


@contextmanager
def _cache(no_cache: bool) -> Iterator[Cache | None]:
    """Offer the user's cache, and say afterwards what was wrong with it."""
    from skytally.cache import Cache, cache_folder

    cache = None if no_cache else Cache(cache_folder())
    try:
        yield cache
    finally:
        for note in () if cache is None else cache.notes:
            _say(f"Note: {note}")


def _load(campaign: str) -> LoadedCampaign:
    from skytally.campaign import load_campaign
    from skytally.local_files import is_url

    if is_url(campaign):
        raise UsageError(
            f"{campaign!r} is a URL, expected the path of a file on this machine",
            remedy="Download the campaign and what it names first; nothing is fetched.",
        )
    return load_campaign(campaign)


def _report_faults(loaded: LoadedCampaign, results: Results, rest: str) -> None:
    """Say which logs could not be read, which rows are set aside as faulty, and what was noted."""
    for log in results.logs:
        if log.fault:
            _say(f"Error: {log.fault} The answer is without {log.telescope}.")
    faults = [
        f"{item.file}, row {item.row}: {item.detail}"
        for telescope in loaded.telescopes
        for item in telescope.log.set_aside
        if item.is_fault
    ]
    _list(faults, "row set aside", "rows set aside", rest)
    _list([f"Note: {note}" for note in results.notes], "note", "notes", rest)


def _leave_if_unread(results: Results) -> None:
    """End with the code that says so if the answer is without a telescope's log."""
    if any(log.fault for log in results.logs):
        raise typer.Exit(EXIT_ERRORS_FOUND)


def _list(lines: Sequence[str], one: str, many: str, rest: str) -> None:
    for line in lines[:LISTED_FAULTS]:
        _say(line)
    more = len(lines) - LISTED_FAULTS
    if more > 0:
        _say(f"and {more} more {one if more == 1 else many}; {rest}")


@contextmanager
def _progress(stage: str) -> Iterator[Progress | None]:
    """Offer a callback whose bar appears on a terminal once the work has lasted a second."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn

    bar = Progress(
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TaskProgressColumn(),
        console=Console(stderr=True),
        transient=True,
    )
    task = bar.add_task(_clean(stage), total=1.0)

    def advance(stage: str, fraction: float) -> None:
        bar.update(task, description=_clean(stage), completed=fraction)

    # A timer, since a long stage may report nothing before it ends.
    timer = threading.Timer(SECONDS_BEFORE_BAR, bar.start)
    timer.daemon = True
    timer.start()
    try:
        yield advance
    finally:
        timer.cancel()
        timer.join()
        bar.stop()


def _print(text: str) -> None:
    """Write data to standard output, all of it."""
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except OSError as error:
        # What is still buffered would fail again, loudly, when Python exits.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        if isinstance(error, BrokenPipeError):
            raise typer.Exit(0) from None
        raise OutputError(
            f"standard output could not be written ({_reason(error)})",
            remedy="Send it somewhere with room.",
        ) from error


def _say(message: str) -> None:
    typer.echo(_clean(message), err=True)


def _clean(text: str) -> str:
    """Strip control characters: names from a log must not steer the terminal."""
    return "".join(c for c in text if c == "\n" or c.isprintable())


def _explain(error: BaseException) -> tuple[int, str]:
    if isinstance(error, SkytallyError):
        return error.exit_code, f"Error: {error}"
    if isinstance(error, KeyboardInterrupt):
        return EXIT_INTERRUPTED, "Stopped."
    if isinstance(error, OSError):
        place = f"{error.filename}: " if error.filename is not None else ""
        return (
            EXIT_INPUT,
            f"Error: {place}it could not be read ({_reason(error)}). Check it and its permissions.",
        )
    return EXIT_INPUT, "Error: memory ran out. Split the campaign, or use a larger machine."


def _ask_to_report(error: Exception) -> str:
    return (
        f"skytally met a fault of its own ({type(error).__name__}: {error}). "
        "Nothing is wrong with what you asked. Please report it to the developers with the "
        "command and, if you can, the campaign; SKYTALLY_DEBUG=1 shows where it happened."
    )


def _reason(error: OSError) -> str:
    return (error.strerror or str(error)).lower()


def _debugging() -> bool:
    return os.environ.get("SKYTALLY_DEBUG", "") not in {"", "0"}


def _show_traceback() -> None:
    if _debugging():
        traceback.print_exc()


def _is_usage_error(error: Exception) -> bool:
    """Tell whether the parser raised it; the parser words these and ends with 2 itself."""
    return any(base.__name__ == "ClickException" for base in type(error).__mro__)
