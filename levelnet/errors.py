"""Exceptions, warnings, the outcome of a calculation, and bad values within complaints."""

from enum import Enum


class Outcome(Enum):
    """How a calculation ended; the value is one sentence: what happened, what to try."""

    CONVERGED = "converged to the tolerance asked"
    QUASI_STEADY_LOST = (
        "an excited level relaxes more slowly than the universe expands, so its quasi-steady "
        "population means nothing at the lowest redshifts; end the grid higher or open a channel"
    )
    STEP_LIMIT = "the step limit was reached; loosen accuracy.relative or raise accuracy.max_steps"
    STEP_TOO_SMALL = (
        "the step size shrank to nothing; check the expansion table and the chosen line treatment "
        "for jumps"
    )
    FIELD_NOT_SETTLED = (
        "one step of radiation field, levels and ionization together did not settle; try another "
        "lines.transfer.frequency_step"
    )
    TABLE_TOO_COARSE = (
        "the reduced network could not be interpolated to the tolerance; loosen accuracy.relative "
        "or set accuracy.interpolate = false"
    )
    SINGULAR = "the rate matrix is singular; some level has no exit in the chosen line treatment"
    NONPOSITIVE_POPULATION = "a population came out negative; please report the setup as a bug"

    @property
    def ok(self) -> bool:
        """True where the result may be used as it stands."""
        return self is Outcome.CONVERGED


def cut_short(text: str, longest: int = 60) -> str:
    """Cut a bad value so that a complaint that repeats it stays one line that can be read.

    Parameters
    ----------
    text : str
        The value as it was given.
    longest : int
        Characters that are repeated; what is longer ends in three points.
    """
    return text if len(text) <= longest else f"{text[:longest]}..."


class LevelnetError(Exception):
    """Base of every error that levelnet raises on purpose; its text is one clear line."""


class InputError(LevelnetError, ValueError):
    """A bad argument, setup or file: says what, where and the allowed range."""


class RangeError(InputError):
    """A value outside the range where a table or formula is known."""


class TableError(LevelnetError):
    """A shipped or cached table is damaged: checksum, column or axis differs."""


class FileFormatError(InputError):
    """A file that cannot be read: foreign, damaged, or of a newer layout."""


class SolveError(LevelnetError):
    """A calculation that failed.

    Attributes
    ----------
    partial : object
        What was computed before, or None.
    outcome : Outcome
        How it ended.
    """

    def __init__(
        self, message: str, partial: object = None, outcome: Outcome | None = None
    ) -> None:
        super().__init__(message)
        self.partial = partial
        self.outcome = outcome or Outcome.SINGULAR


class AccuracyWarning(UserWarning):
    """A stated validity range is left; the text gives the figure and the limit."""
