"""The errors that a user may meet, each with the exit code it leads to.

Every error is a child of :class:`EddyshedError` and of the builtin that a
Python user would expect. All of them survive pickling, because they cross
process borders when members run in parallel: the constructor's arguments
are kept as ``args`` and the text is made in ``__str__``.
"""

from __future__ import annotations


class EddyshedError(Exception):
    """Base of all errors raised on purpose.

    Attributes
    ----------
    exit_code : int
        What the command line exits with: 2 for bad input, 1 for a run that
        failed.
    """

    exit_code = 1


class ConfigError(EddyshedError, ValueError):
    """The config, or a command-line option, is wrong.

    Parameters
    ----------
    source : str
        Where the config came from (a file name).
    problems : tuple of str
        All problems found, one line each.
    """

    exit_code = 2

    def __init__(self, source: str, problems: tuple[str, ...]):
        super().__init__(source, tuple(problems))

    def __str__(self) -> str:
        source, problems = self.args
        if len(problems) == 1:
            return f"{source}: {problems[0]}"
        lines = "".join(f"\n  - {problem}" for problem in problems)
        return f"{source}: {len(problems)} problems{lines}"


class ContractError(EddyshedError, TypeError):
    """A model, basis or closure does not do what its contract says."""

    exit_code = 2


class DataError(EddyshedError, ValueError):
    """Data (a file, a series) cannot be used for what was asked."""

    exit_code = 2


class RunFolderError(EddyshedError, RuntimeError):
    """A run folder cannot be used: foreign, damaged, or not writable."""

    exit_code = 2


class EngineError(EddyshedError, RuntimeError):
    """Members cannot be run where the config says: nothing there answers."""

    exit_code = 2


class LostWorker(EddyshedError, RuntimeError):
    """The process that ran a member died, again and again."""


class Blowup(EddyshedError, ArithmeticError):
    """A truth run or a reduced model left the finite numbers.

    Parameters
    ----------
    what : str
        Which run, and what was seen.
    step : int
        Step at which it was seen.
    time : float
        Model time [s] at which it was seen.
    advice : str
        The last good checkpoint, and what to try.
    """

    def __init__(self, what: str, step: int, time: float, advice: str):
        super().__init__(what, step, time, advice)

    def __str__(self) -> str:
        what, step, time, advice = self.args
        return f"{what} at step {step} (model time {time:.6g} s). {advice}"
