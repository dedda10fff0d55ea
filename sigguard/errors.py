"""What can go wrong, as one tree.

SigguardError
├── ReadError          a recording could not be read: file, place, expected, found, remedy
│   └── NoECGLead      the file is sound but holds no ECG lead
├── UsageError         an option or argument that makes no sense
├── ProfileError       an acceptance profile that cannot be used
├── ModelError         the trained model is missing, damaged or does not answer its probes
├── LedgerError        a ledger that cannot be opened or does not hold what is asked for
└── WriteError         an output could not be written whole
"""

from __future__ import annotations


class SigguardError(Exception):
    """Root of every error this project raises on purpose."""


class ReadError(SigguardError):
    """A recording that cannot be read.

    The sentence names the file, where in it the trouble lies, what was expected, what was
    found, and what to do about it.
    """

    def __init__(self, file: str, *, where: str, expected: str, found: str, remedy: str) -> None:
        self.file, self.where, self.expected, self.found, self.remedy = file, where, expected, found, remedy
        super().__init__(f"{file}: {where}: expected {expected}, found {found}; {remedy}")

    def __reduce__(self) -> tuple:
        """So that it can come out of another process: the usual way would call it with the sentence alone."""
        told = {"where": self.where, "expected": self.expected, "found": self.found, "remedy": self.remedy}
        return _again, (type(self), self.file, told)


def _again(kind: type[ReadError], file: str, told: dict[str, str]) -> ReadError:
    return kind(file, **told)


class NoECGLead(ReadError):
    """The file can be read, but none of its signals is an ECG lead."""


class UsageError(SigguardError):
    """An option or argument that makes no sense; the message says which would."""


class ProfileError(SigguardError):
    """An acceptance profile that cannot be found, read or used."""


class ModelError(SigguardError):
    """The trained model is missing, damaged, or does not give its stored answers."""


class LedgerError(SigguardError):
    """A ledger of watched recordings that cannot be opened, or holds no such recording."""


class WriteError(SigguardError):
    """An output that could not be written whole; nothing is left under its final name."""
