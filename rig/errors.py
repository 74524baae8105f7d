"""What can go wrong, named by what the user must repair.

Every message is one line: the subject with its name, the rule, the value got, and the
remedy. The command line turns any of these into that line and an exit code; a traceback
there means a fault of our own.
"""

from __future__ import annotations


class LockspanError(ValueError):
    """Base of every refusal that a user can repair."""


class CaptureError(LockspanError):
    """A capture file cannot be read as what it claims to be."""


class ChannelError(LockspanError):
    """The wiring is wrong: a channel that is not there, or a setup that contradicts itself."""


class PhaseError(LockspanError):
    """A signal carries no usable phase: silent, clipped, too few samples a cycle, no line."""


class FitError(LockspanError):
    """A model cannot be evaluated or fitted with these values."""


class LimitError(LockspanError):
    """A limit is stated so that no verdict can follow from it."""


class SweepFileError(LockspanError):
    """The sweep file or its table of points breaks a rule; key and value are named."""
