"""Every error the program raises on purpose.

::

    KettlewatchError
    ├── InputError            the sheet or the call is wrong                       exit 2
    │   └── SheetError        names file, key and what was expected
    ├── NothingToDoError      nothing was ever there to be measured or fitted      exit 3
    ├── LogbookError          held by another follower, or cannot be written       exit 4
    │   └── LeaseLostError    another follower has taken over while this one ran
    ├── UnreadableError       one file cannot be read; ends as state `unreadable`
    ├── NotYetError           one file is not complete yet; it is looked at again
    └── FitError              the data do not allow this fit; the message says why

Only `UnreadableError` and `NotYetError` concern one file: the follower turns them into a
state and goes on. The others reach the user as one line on standard error.
"""


class KettlewatchError(Exception):
    """Base of all errors raised on purpose; `exit_status` is that of the commands."""

    exit_status = 1


class InputError(KettlewatchError):
    """The call or a file the user wrote is wrong."""

    exit_status = 2


class SheetError(InputError):
    """The run sheet is wrong; the message names file, key and expectation."""


class NothingToDoError(KettlewatchError):
    """There was never anything that could be measured or fitted."""

    exit_status = 3


class LogbookError(KettlewatchError):
    """The logbook is held by another follower, damaged, or cannot be written."""

    exit_status = 4


class LeaseLostError(LogbookError):
    """Another follower has taken over; trying again would disturb it."""


class UnreadableError(KettlewatchError):
    """A spectrum cannot be read; the message is the reason, in a chemist's words."""


class NotYetError(KettlewatchError):
    """A spectrum is not complete yet; the message says what is still missing."""


class FitError(KettlewatchError):
    """The data do not allow this fit; the message says why and what would help."""

    exit_status = 3
