"""The command ``eddyshed``: results on stdout, everything else on stderr."""

from __future__ import annotations

import argparse
import json
import logging
import os
import re
import sys
from collections.abc import Sequence
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path

from .noise.arguments import add_noise

STAGE_HELP = {
    "truth": "make the truth run (goes on where it was interrupted)",
    "reduce": "split the truth, fit the noise, make the reduced models",
    "audit": "test what the reduced models assume",
    "benchmark": "run the reduced models and score them against the truth",
    "report": "write report.html",
    "study": "all of it: whatever is missing or out of date",
}
EPILOG = """\
Each command first brings up to date whatever it needs. Exit codes: 0 done,
1 the run failed, 2 bad usage or input, 130 and 143 interrupted (run the same
command again to go on)."""


def parser() -> argparse.ArgumentParser:
    """Build the command-line parser."""
    top = argparse.ArgumentParser(
        prog="eddyshed",
        description="Reduced stochastic models of toy oceans, audited and scored "
        "against the truth that they stand in for.",
        epilog=EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    top.add_argument("--version", action="version", version=version("eddyshed"))
    commands = top.add_subparsers(dest="command", required=True, metavar="COMMAND")

    check = commands.add_parser(
        "check",
        help="read the config; print scales, warnings and a cost forecast",
        allow_abbrev=False,
    )
    check.add_argument("config", type=Path, nargs="?", help="the TOML config")
    check.add_argument(
        "--reference",
        action="store_true",
        help="print every config key with its unit, default, range and meaning",
    )
    _add_common(check)

    for name, text in STAGE_HELP.items():
        stage = commands.add_parser(name, help=text, allow_abbrev=False)
        stage.add_argument("config", type=Path, help="the TOML config")
        stage.add_argument(
            "--quiet", action="store_true", help="no progress and no log on stderr"
        )
        _add_common(stage)
        if name == "truth":
            stage.add_argument(
                "--members",
                type=_slice,
                metavar="FIRST:END",
                help="run these members alone, END not among them, such as 0:8; "
                "several commands may run members of one study at the same time",
            )

    add_noise(commands)

    show = commands.add_parser(
        "show", help="say what a file or run folder of ours holds", allow_abbrev=False
    )
    show.add_argument("path", type=Path, help="a file or run folder")
    show.add_argument("--json", action="store_true", help="print JSON instead of words")
    show.add_argument(
        "--equation",
        metavar="CLOSURE",
        help="write out the reduced equation of white or white_open, from a run folder",
    )
    return top


def _add_common(command):
    """Add the options of every command that reads a config."""
    command.add_argument(
        "--set",
        action="append",
        default=[],
        metavar="SECTION.KEY=VALUE",
        dest="overrides",
        help="override a key of the config; may be given several times",
    )
    command.add_argument(
        "--runs",
        type=Path,
        default=Path("runs"),
        metavar="DIR",
        help="where run folders are made (default: ./runs)",
    )
    command.add_argument(
        "--json", action="store_true", help="print JSON instead of a table"
    )
    command.add_argument(
        "--engine",
        choices=("processes", "dask", "serial"),
        help="where members run, instead of [engine] kind",
    )
    command.add_argument(
        "--workers",
        type=int,
        metavar="N",
        help="members that run at the same time, instead of [engine] workers",
    )
    command.add_argument(
        "--ignore-disk-space",
        action="store_true",
        help="go ahead even if the truth will not fit the disk",
    )
    command.add_argument(
        "--allow-hooks",
        action="store_true",
        help="let code that the config names as package.module:Name run",
    )


def _slice(text):
    """Members of ``FIRST:END``, as Python counts; an end left out is the last."""
    found = re.fullmatch("([0-9]*):([0-9]*)", text)
    if found is None:
        message = f"{text!r} is not FIRST:END, such as 0:8"
        raise argparse.ArgumentTypeError(message)
    first, end = found.groups()
    return slice(int(first or 0), int(end) if end else None)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments; those of the process if not given.

    Returns
    -------
    int
        Exit code.
    """
    options = parser().parse_args(argv)
    # Products here are small: a second thread waits more than it works, and the
    # last bits of a sum depend on how many there are. Numpy is not loaded yet.
    for library in ("OMP", "OPENBLAS", "MKL"):
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    try:
        return _run(options)
    except KeyboardInterrupt:
        print("interrupted; run the same command again to go on", file=sys.stderr)
        return 130
    except BrokenPipeError:
        # The reader of stdout has gone: nothing is left to say, nor to flush.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


def _run(options):
    """Dispatch, and turn our errors into one message and an exit code."""
    from eddyshed.solver.errors import EddyshedError

    try:
        if options.command == "show":
            return _show(options)
        if options.command == "check":
            return _check(options)
        if options.command == "noise":
            return _noise(options)
        return _stage(options)
    except EddyshedError as error:
        print(f"eddyshed: {error}", file=sys.stderr)
        return error.exit_code


def _read(options):
    """Read the config of a command."""
    from eddyshed.solver.config import read_config

    from .settings import StudyConfig

    overrides = list(options.overrides)
    # One way only into the config, so that all is checked alike.
    if options.engine is not None:
        overrides.append(f'engine.kind="{options.engine}"')
    if options.workers is not None:
        overrides.append(f"engine.workers={options.workers}")
    document = read_config(options.config, StudyConfig, overrides)
    _look_up(document, allowed=options.allow_hooks)
    return document


def _members(options, config):
    """Members that a command asks for; None for all."""
    from eddyshed.solver.errors import ConfigError

    asked = getattr(options, "members", None)
    if asked is None:
        return None
    count = config.ensemble.members
    end = count if asked.stop is None else asked.stop
    if not 0 <= asked.start < end <= count:
        problem = (
            f"asks for members {asked.start} up to {end}; the config has "
            f"{count}, numbered from 0"
        )
        raise ConfigError("--members", (problem,))  # noqa: EM101 (not a message)
    return range(asked.start, end)


def _look_up(document, *, allowed):
    """Import the user's own code that a config names, if that is allowed."""
    from eddyshed.solver.errors import ConfigError, DataError
    from eddyshed.solver.hooks import load

    hooks, problems = document.config.hooks, []
    if hooks and not allowed:
        named = ", ".join(f"{where} {hook.name}" for where, hook in hooks)
        problem = (
            f"names code that is not eddyshed's own ({named}); if you trust it, let it "
            "run with --allow-hooks"
        )
        raise ConfigError(document.source, (problem,))
    if hooks:
        sys.path.insert(0, os.getcwd())  # as Python itself has it for its own -m
    for where, hook in hooks:
        try:
            load(hook.name)
        except DataError as error:
            problems.append(f"{where}: {error}")
    if problems:
        raise ConfigError(document.source, tuple(problems))


def _check(options):
    """Carry out ``check``."""
    from eddyshed.solver.config import reference
    from eddyshed.solver.errors import ConfigError

    from .settings import StudyConfig

    if options.reference:
        print(reference(StudyConfig))
        return 0
    if options.config is None:
        problem = "give a config, or --reference for the list of keys"
        raise ConfigError("eddyshed check", (problem,))  # noqa: EM101 (not a message)
    document = _read(options)
    from eddyshed.solver.forecast import forecast_run

    from .preflight import preflight
    from .study import Study, free_bytes
    from .tables import forecast_json, forecast_table
    from .truth_stage import refuse_full_disk

    preflight(document.config)
    found = forecast_run(document.config)
    free = free_bytes(options.runs)
    if options.json:
        print(json.dumps(forecast_json(found, free), indent=1))
    else:
        print(forecast_table(document.config, found, free))
    refuse_full_disk(
        Study(
            document=document,
            folder=options.runs / document.config.name,
            ignore_disk_space=options.ignore_disk_space,
        )
    )
    return 0


def _noise(options):
    """Carry out ``noise``."""
    from .noise.command import noise_of_file, noise_table

    found = noise_of_file(options)
    print(json.dumps(found, indent=1) if options.json else noise_table(found))
    return 0


def _stage(options):
    """Carry out a stage, or all of them."""
    document = _read(options)
    from .preflight import preflight
    from .signals import signals
    from .stages import STAGES
    from .study import Incomplete, Interrupted, Study, bring_up_to_date, opened
    from .tables import stage_json, stage_table, truth_table

    preflight(document.config)

    with _log_on_stderr(options.quiet), signals() as caught:
        study = Study(
            document=document,
            folder=options.runs / document.config.name,
            overrides=tuple(options.overrides),
            quiet=options.quiet,
            members=_members(options, document.config),
            ignore_disk_space=options.ignore_disk_space,
            stop=lambda: bool(caught),
            gentle=caught.gentle,
        )
        last = "report" if options.command == "study" else options.command
        with opened(study):
            try:
                bring_up_to_date(study, STAGES, last)
            except Interrupted as stopped:
                print(f"eddyshed: {stopped}", file=sys.stderr)
                return 128 + caught.number
            except Incomplete:
                # What came of each is a result, and why is part of it.
                _print(
                    stage_json(study, "truth") if options.json else truth_table(study)
                )
                raise
            _print(
                stage_json(study, options.command)
                if options.json
                else stage_table(study, options.command)
            )
    return 0


def _print(result):
    """Print a table, or plain data as JSON."""
    print(result if isinstance(result, str) else json.dumps(result, indent=1))


@contextmanager
def _log_on_stderr(quiet):
    """Show what goes on while the block runs."""
    log = logging.getLogger("eddyshed")
    log.setLevel(logging.INFO)
    handler = logging.NullHandler() if quiet else logging.StreamHandler(sys.stderr)
    handler.setFormatter(logging.Formatter("%(message)s"))
    log.addHandler(handler)
    try:
        yield
    finally:
        log.removeHandler(handler)


def _show(options):
    """Carry out ``show``."""
    from .show import describe, equation

    if options.equation is not None:
        text = equation(options.path, options.equation)
        print(json.dumps({"equation": text}, indent=1) if options.json else text)
        return 0
    found = describe(options.path)
    if options.json:
        print(json.dumps(found, indent=1))
    else:
        for key, value in found.items():
            print(f"{key}: {value}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
