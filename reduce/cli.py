"""The command ``eddyshed``: results on stdout, everything else on stderr."""

from __future__ import annotations

import argparse
import json
import logging
import os
import signal
import sys
from collections.abc import Sequence
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path

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
        return _stage(options)
    except EddyshedError as error:
        print(f"eddyshed: {error}", file=sys.stderr)
        return error.exit_code


def _read(options):
    """Read the config of a command."""
    from eddyshed.solver.config import read_config

    from .settings import StudyConfig

    return read_config(options.config, StudyConfig, options.overrides)


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

    from .stages import preflight
    from .study import free_bytes
    from .tables import forecast_json, forecast_table

    preflight(document.config, "check")
    found = forecast_run(document.config)
    free = free_bytes(options.runs)
    if options.json:
        print(json.dumps(forecast_json(found, free), indent=1))
    else:
        print(forecast_table(document.config, found, free))
    return 0


def _stage(options):
    """Carry out a stage, or all of them."""
    document = _read(options)
    from .stages import STAGES, preflight
    from .study import Interrupted, Study, bring_up_to_date, opened
    from .tables import stage_json, stage_table

    preflight(document.config, options.command)

    if not options.quiet:
        handler = logging.StreamHandler(sys.stderr)
        handler.setFormatter(logging.Formatter("%(message)s"))
        logging.getLogger("eddyshed").addHandler(handler)
    logging.getLogger("eddyshed").setLevel(logging.INFO)
    with _signals() as caught:
        study = Study(
            document=document,
            folder=options.runs / document.config.name,
            overrides=tuple(options.overrides),
            quiet=options.quiet,
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
            if options.json:
                print(json.dumps(stage_json(study, options.command), indent=1))
            else:
                print(stage_table(study, options.command))
    return 0


class _Caught:
    """Signals seen so far; while gentle, the first one only sets a flag."""

    def __init__(self):
        self.number = 0
        self._gentle = False

    def __bool__(self):
        return self.number != 0

    @contextmanager
    def gentle(self):
        """Let the first signal in this block wait for a checkpoint."""
        self._gentle = True
        try:
            yield
        finally:
            self._gentle = False

    def handle(self, number, frame):
        """Note a signal; end at once if it is the second, or nothing is at stake."""
        first = not self
        self.number = number
        if not (self._gentle and first):
            if number == signal.SIGINT:
                raise KeyboardInterrupt
            raise SystemExit(128 + number)


@contextmanager
def _signals():
    """Catch SIGINT and SIGTERM while the block runs."""
    caught = _Caught()
    before = {
        number: signal.signal(number, caught.handle)
        for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield caught
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


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
