"""Exceptions of the package; each is also the built-in a caller would already catch."""


class FragkitError(Exception):
    """Base class of everything this package raises on purpose."""


class InputError(FragkitError, ValueError):
    """An argument or a file is not what it must be; the message names it and the next step."""


class MismatchError(InputError):
    """Two objects that belong to different Hamiltonians, plans or settings were mixed."""


class NotConvergedError(FragkitError, RuntimeError):
    """An iteration ended before its tolerance and the caller asked for that to be an error."""


class MissingDependencyError(FragkitError, ImportError):
    """An optional package is needed for this call; the message names the install command."""
