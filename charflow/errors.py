"""Every error charflow raises on purpose, drawn as one tree.

::

    CharflowError
    |-- InputError            the user's files or arguments are wrong          exit status 2
    |   |-- SheetError        the cell sheet
    |   |-- NetlistError      a netlist or model file, its subckts and ports
    |   |-- RefusedError      a file asks for something charflow will not run
    |   |-- FunctionError     the cell does not do what its sheet says
    |   `-- FolderError       an output folder or the store in it
    |-- SimulatorError        ngspice is missing or unsound                    exit status 3
    `-- TrialError            one transient gave no answer                     exit status 1
        |-- LoadError         the deck did not load
        |-- ConvergenceError  the transient stopped early on every setting tried
        |-- TrialTimeout      it took longer than allowed
        `-- WorkerDied        the process that ran it ended

A message says what was found, what was expected and what to do. Context (file, line, key, cell, arc,
condition) is added on the way up with :meth:`CharflowError.at`. Errors cross process borders, so each
one survives pickling.
"""

from __future__ import annotations

from typing import Self


class CharflowError(Exception):
    """Base of all errors charflow raises on purpose.

    ``message`` is one sentence; ``where`` lists the places it applies to, innermost first; ``todo``
    says what the user can do.
    """

    exit_status = 2

    def __init__(self, message: str, *, where: tuple[str, ...] = (), todo: str = "") -> None:
        super().__init__(message, where, todo)
        self.message = message
        self.where = where
        self.todo = todo

    def __reduce__(self) -> tuple[object, ...]:
        return (_rebuild, (type(self), self.message, self.where, self.todo))

    def at(self, place: str) -> Self:
        """Return the same error with one more, outer place named."""
        return type(self)(self.message, where=(*self.where, place), todo=self.todo)

    def __str__(self) -> str:
        place = visible(", ".join(reversed(self.where)))
        message, todo = ("\n".join(map(visible, text.split("\n"))) for text in (self.message, self.todo))
        text = f"{place}: {message}" if place else message
        return f"{text}\n  {todo}" if todo else text


def visible(text: str) -> str:
    """Return ``text`` with what does not print (line ends, terminal commands) written as escapes."""
    if text.isprintable():
        return text
    return "".join(
        c if c.isprintable() else c.encode("unicode_escape", "backslashreplace").decode() for c in text
    )


def _rebuild(kind: type[CharflowError], message: str, where: tuple[str, ...], todo: str) -> CharflowError:
    return kind(message, where=where, todo=todo)


class InputError(CharflowError):
    """Something the user gave is wrong."""


class SheetError(InputError):
    """The cell sheet is wrong."""


class NetlistError(InputError):
    """A netlist or model file is missing, unreadable or does not hold what the sheet names."""


class RefusedError(InputError):
    """A file asks for something charflow will not run."""


class FunctionError(InputError):
    """Simulation shows that the cell does not do what its sheet says."""


class FolderError(InputError):
    """An output folder, or the store in it, cannot be used."""


class SimulatorError(CharflowError):
    """ngspice is missing, of an unusable version, or broken."""

    exit_status = 3


class TrialError(CharflowError):
    """One transient gave no answer."""

    exit_status = 1


class LoadError(TrialError):
    """ngspice refused the deck."""


class ConvergenceError(TrialError):
    """The transient stopped early on every setting tried."""


class TrialTimeout(TrialError):
    """The transient took longer than allowed."""


class WorkerDied(TrialError):
    """The worker process that ran the transient ended."""
