"""How an update ended, as a supervising process sees it."""

from enum import IntEnum

from hyperforecast.checks import InputError


class UpdateStatus(IntEnum):
    """Exit statuses of an update. 1 is a fault of the program, 2 an input that breaks a rule (`InputError`)."""

    KEPT = 0
    ROLLED_BACK = 3
    BUSY = 4
    DAMAGED = 5
    NOT_WRITABLE = 6


class FolderBusy(InputError):
    """Another update is at work in the device folder: try again later."""

    status = UpdateStatus.BUSY


class FolderDamaged(InputError):
    """The newest generation of the device folder is damaged: go back to the one before, or copy the folder again."""

    status = UpdateStatus.DAMAGED


class FolderNotWritable(InputError):
    """The device folder takes no new generation: it is read-only, or its disk full or failing. Nothing has changed."""

    status = UpdateStatus.NOT_WRITABLE
