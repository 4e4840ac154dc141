"""What can go wrong, one class per kind; imports nothing of the package."""

from __future__ import annotations


class ScantlingError(Exception):
    """Base of every error the package raises on purpose."""


class InputError(ScantlingError, ValueError):
    """A file, a key or an argument is not usable.

    The message is one line. It names the file, row, column, key or argument,
    says what was found and what is accepted.
    """


class ResourceError(InputError):
    """The machine stopped the run, not the input: a full disk, a lost worker.

    What is finished by then is worth keeping.
    """


class NotAvailableError(InputError):
    """A part of the design language that this version does not carry out."""
