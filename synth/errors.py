"""The errors a caller can catch, one tree.

::

    PolewrightError
    |-- JobError (ValueError)              the job cannot be read           exit code 2
    |   |-- QuantityError                  a quantity cannot be read
    |   |-- TargetError                    H(s) cannot be accepted
    |       |-- ExpressionError            ... with the position in the text
    |-- RealizationError (ValueError)      the job cannot be realised       exit code 2
    |   |-- GraphError                     a block graph contradicts itself
    |   |-- CircuitError                   a circuit contradicts itself
    |-- SimulatorError (RuntimeError)      the simulator                    exit code 3
    |   |-- SimulatorMissingError          is not installed
    |   |-- SimulationFailedError          refused the deck or crashed
    |   |-- SimulationTimeoutError         passed its time limit
    |-- NumericalError (ArithmeticError)   a computation lost its accuracy  exit code 70

Every class carries ``exit_code``, which the command line returns.  A message is one
line: the key path (where there is one), what came, and what was expected.
"""

from __future__ import annotations

from typing import ClassVar

__all__ = [
    "CircuitError",
    "ExpressionError",
    "GraphError",
    "JobError",
    "NumericalError",
    "PolewrightError",
    "QuantityError",
    "RealizationError",
    "SimulationFailedError",
    "SimulationTimeoutError",
    "SimulatorError",
    "SimulatorMissingError",
    "TargetError",
]


class PolewrightError(Exception):
    """Root of the tree; `exit_code` is what the command line returns."""

    exit_code: ClassVar[int] = 70


class JobError(PolewrightError, ValueError):
    """The job cannot be read.

    Parameters
    ----------
    problem
        What came and what was expected, one line.
    key
        Path of the key in the job, such as ``"board.resistors.series"``, or ``""``.
    """

    exit_code: ClassVar[int] = 2

    def __init__(self, problem: str, *, key: str = "") -> None:
        self.problem = problem
        self.key = key
        super().__init__(f"{key}: {problem}" if key else problem)


class QuantityError(JobError):
    """A quantity such as ``"4k7"`` cannot be read."""


class TargetError(JobError):
    """H(s) is not one that can be built as asked."""


class ExpressionError(TargetError):
    """The expression for H(s) cannot be read.

    `text` is the expression and `position` the offending character, counted from 0;
    `marked` shows both on two lines, the second a caret under the character, of a long
    expression only what stands around it.
    """

    # Characters of a long expression shown before and behind the offending one.
    around: ClassVar[int] = 36

    def __init__(self, problem: str, *, text: str, position: int, key: str = "") -> None:
        self.text = text
        self.position = position
        super().__init__(f"{problem} at character {position + 1}", key=key)

    @property
    def marked(self) -> str:
        """The expression, or what stands around the character, with a caret under it."""
        start, end = max(self.position - self.around, 0), self.position + self.around
        before = "..." if start else ""
        behind = "..." if end < len(self.text) else ""
        place = " " * (len(before) + self.position - start)
        return f"{before}{self.text[start:end]}{behind}\n{place}^"


class RealizationError(PolewrightError, ValueError):
    """The job was understood but no circuit within its rules exists."""

    exit_code: ClassVar[int] = 2


class GraphError(RealizationError):
    """A block graph contradicts itself: an unknown source, an adder loop, ..."""


class CircuitError(RealizationError):
    """A circuit contradicts itself: an unknown net, a reference used twice, ..."""


class SimulatorError(PolewrightError, RuntimeError):
    """The circuit simulator did not deliver.

    `log` keeps what the simulator printed; the message says what to do next.
    """

    exit_code: ClassVar[int] = 3

    def __init__(self, message: str, *, log: str = "") -> None:
        self.log = log
        super().__init__(message)


class SimulatorMissingError(SimulatorError):
    """The ngspice library is not installed."""


class SimulationFailedError(SimulatorError):
    """The simulator refused the deck, found no solution, or crashed."""


class SimulationTimeoutError(SimulatorError):
    """The simulator passed its time limit and was ended."""


class NumericalError(PolewrightError, ArithmeticError):
    """A computation lost the accuracy it promises; the message names the likely cause."""
