"""What can go wrong, sorted by whose mistake it is."""


class PlatewatchError(Exception):
    """A foreseeable mistake; its text says where it is and what to do."""


class SettingsError(PlatewatchError):
    """The plate description or an argument is wrong (exit code 2)."""


class PlateError(PlatewatchError):
    """A plate that cannot be built as described (exit code 2)."""


class ShapeError(PlatewatchError):
    """Arrays whose shapes do not fit each other."""


class MessageError(PlatewatchError):
    """A payload that is not what its channel was declared to carry."""


class NoDataError(PlatewatchError):
    """Nothing to work on: an empty log, no broker (exit code 3)."""


class StorageError(PlatewatchError):
    """The database cannot be opened, read or written (exit code 4)."""
