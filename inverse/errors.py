"""What can go wrong, in four kinds; each also is the built-in error a script would expect.

Not reaching a target is a result and has no class here.
"""

from __future__ import annotations


class InverseError(Exception):
    """Base of everything this package raises on purpose."""


class QuantityError(InverseError, ValueError):
    """A number with its unit, or a product of names, could not be read.

    The message has two parts so that whoever knows the place can put it in front:
    what was expected and what was found.
    """

    def __init__(self, expected: str, found: str, hint: str = "") -> None:
        """Keep the parts and join them into one sentence."""
        self.expected, self.found, self.hint = expected, found, hint
        super().__init__(f"expected {expected}, found {found}" + (f"; {hint}" if hint else ""))


class StudyError(InverseError, ValueError):
    """A study file, a companion file or a command is at fault."""


class ModelError(InverseError, ValueError):
    """The parts as described make no assembly that rests in a stable equilibrium."""


class DesignError(InverseError, RuntimeError):
    """Raised only where a script asked for success and there was none."""
