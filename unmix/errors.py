"""What can go wrong, as one tree.

    UnmixError
    ├── InputError (ValueError)      a value, key, channel or option the user handed in
    ├── FileError (OSError)          a file that is missing, cut short, unreadable or in the way
    ├── UnsolvableError (ValueError) a case no answer exists for, with the remedy
    └── MissingExtraError (ImportError)  an optional dependency that is not installed
    UnmixWarning (UserWarning)       the job was done, and the user should know something

Every message is one line: what is wrong, where (file and key, or channel number), and what to do.
"""

from __future__ import annotations

__all__ = ["FileError", "InputError", "MissingExtraError", "UnmixError", "UnmixWarning", "UnsolvableError"]


class UnmixError(Exception):
    """Base of every error that `unmix` raises on purpose."""


class InputError(UnmixError, ValueError):
    """Something the user handed in is wrong."""


class FileError(UnmixError, OSError):
    """A file is missing, cut short, unreadable, or would be replaced."""


class UnsolvableError(UnmixError, ValueError):
    """The case as stated has no answer."""


class MissingExtraError(UnmixError, ImportError):
    """An optional dependency is needed and not installed."""


class UnmixWarning(UserWarning):
    """The job was done, and there is something the user should know."""
