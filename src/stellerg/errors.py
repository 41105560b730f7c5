"""What is raised for a caller's mistake.

::

    StellergError (ValueError)
    ├── InputError      a value, option or column that cannot be what the caller means
    ├── PriorError      a structure file that does not describe a proper density
    └── EngineError     an engine asked for a problem it does not answer

A row that cannot be done is not an error: it gets a status (`stellerg.status`).
"""

__all__ = ["EngineError", "InputError", "PriorError", "StellergError"]


class StellergError(ValueError):
    """A caller's mistake: the message says what, the rule, the value got and the way out."""


class InputError(StellergError):
    """A value, option or column that cannot be what the caller means."""


class PriorError(StellergError):
    """A structure file that does not describe a proper density.

    Attributes
    ----------
    line : int or None
        The line of the fault, counted from 1, which the message names too; None where there is no text.
    """

    def __init__(self, message: str, line: int | None = None):
        super().__init__(message)
        self.line = line


class EngineError(StellergError):
    """An engine asked for a problem it does not answer."""
