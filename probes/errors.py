"""Errors that say what went wrong, where, and what to do next.

Every error that a user can cause derives from :class:`StepwardenError`; the command line turns it
into one message and an exit status, so none of them is ever seen as a traceback.
"""

from __future__ import annotations


class StepwardenError(Exception):
    """Base of all expected errors.

    what: the fact, in one sentence without a full stop.
    where: the file, key or address it concerns ("" if none).
    remedy: what to try next ("" if nothing sensible is known).
    """

    def __init__(self, what: str, where: str = "", remedy: str = "") -> None:
        self.what, self.where, self.remedy = what, where, remedy
        super().__init__(what, where, remedy)

    def __str__(self) -> str:
        text = f"{self.where}: {self.what}" if self.where else self.what
        return f"{text}; {self.remedy}" if self.remedy else text


class SettingsError(StepwardenError):
    """A setting, option or configuration file cannot be used as it stands."""


class ReadError(StepwardenError):
    """A snapshot file cannot be read, now or ever."""


class NotYet(ReadError):
    """A snapshot file looks incomplete: its writer is probably still at it, so try again later."""


class Held(NotYet):
    """The file's writer holds it in a way that no reader gets in for now."""


class Refused(ReadError):
    """A file is declined on purpose (external data, a size over the budget, a missing reader)."""


class ArrivalError(StepwardenError):
    """A folder cannot be listed or watched."""


class ChildError(StepwardenError):
    """The reading process died, hung or answered nonsense."""


class ChildHung(ChildError):
    """The reading process did not answer within its time limit."""
