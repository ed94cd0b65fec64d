"""Errors that name whose fault they are.

`ConfigError` and `ModelError` are in the operator's files, `WireError` is the sender's, `SessionError` lies
in a recording, `SystemFault` in the machine we run on. Anything else that is raised is our own bug.
"""

from __future__ import annotations


class LimbtellError(Exception):
    """Base of all expected errors: where, what was found, what was expected, what to do.

    Parameters
    ----------
    where : str
        File, key, element or topic the error lies in.
    found, expected : str
        What was there, and what should have been.
    todo : str
        What a person can do about it; may be empty.
    """

    def __init__(self, where: str, found: str, expected: str, todo: str = "") -> None:
        self.where, self.found, self.expected, self.todo = where, found, expected, todo
        super().__init__(where, found, expected, todo)

    def __str__(self) -> str:
        text = f"{self.where}: found {self.found}; expected {self.expected}"
        return f"{text}. {self.todo}" if self.todo else text


class ConfigError(LimbtellError):
    """The configuration file asks for something that cannot be."""


class ModelError(LimbtellError):
    """The robot description is malformed or physically impossible."""


class WireError(LimbtellError):
    """A message does not keep to the wire format; it is counted and never enters the data path.

    `kind` says what is wrong in one stable word: `malformed`, `version`, `names` or `robot`.
    """

    def __init__(self, where: str, found: str, expected: str, kind: str = "malformed") -> None:
        super().__init__(where, found, expected)
        self.kind = kind
        self.args = (where, found, expected, kind)  # what a copy in another process is made of


class SessionError(LimbtellError):
    """A recording cannot be read as a session."""


class SystemFault(LimbtellError):
    """The machine refuses what was asked of it: a port in use, a folder that cannot be written."""
