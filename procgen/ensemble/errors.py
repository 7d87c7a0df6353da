"""The errors of this room."""

from __future__ import annotations

import errno
import os

MEND = "to mend: render again with --resume (resume=True), which draws missing and damaged parts anew"


class EnsembleError(ValueError):
    """An ensemble that cannot be made, read or trusted; the message says why and how to mend it."""


class Damaged(EnsembleError):
    """A file of an ensemble is damaged, or is not one."""


class Refused(EnsembleError):
    """The system let nothing be read: what is there may be in order, and nobody has seen that it is not."""


class InUse(EnsembleError):
    """Another process is drawing into the folder; it may be asked again."""


RESUME = "then go on with --resume (resume=True)"
_FULL = (errno.ENOSPC, errno.EDQUOT)
_FORBIDDEN = (errno.EACCES, errno.EPERM, errno.EROFS)
_TOO_MANY = (errno.EMFILE, errno.ENFILE)
_MANY = "raise the limit (ulimit -n), or use fewer workers"
_TRIAL = 256 << 20  # bytes: more than a run of rows takes


def system_sentence(error: OSError, doing: str) -> str:
    """What the operating system refused, in a sentence."""
    if error.errno in _FULL:
        return f"no space left while {doing}; free some space, {RESUME}"
    if error.errno in _FORBIDDEN:
        return f"no permission for {doing} ({error.strerror}); mend the permissions, {RESUME}, or choose another OUT"
    if error.errno == errno.EFBIG:
        return f"a file grew above the limit of this process or file system while {doing}; raise the limit, {RESUME}"
    if error.errno in _TOO_MANY:
        return f"too many open files while {doing}; {_MANY}, {RESUME}"
    if error.errno == errno.EAGAIN:
        return f"the system refused {doing}: too many processes (ulimit -u); use fewer workers, {RESUME}"
    return f"the system refused {doing}: {error.strerror or error}"


def few_words(error: OSError) -> str:
    """What the operating system refused, where nobody knows more than the error says."""
    where = f"{error.filename}: " if error.filename else ""
    mend = f"; {_MANY}" if error.errno in _TOO_MANY else ""
    return f"{where}{error.strerror or error}{mend}"


def refuse_unread(error: BaseException, path: object) -> None:
    """Raise Refused where it is the system that lets `path` not be read: of the file itself that says nothing."""
    number = error.errno if isinstance(error, OSError) else None
    if number in _TOO_MANY:
        raise Refused(f"too many open files while reading {path}; {_MANY}") from None
    if number in _FORBIDDEN:
        raise Refused(f"no permission for reading {path} ({os.strerror(number)}); mend the permissions") from None
    if lacks_memory(error) and (number == errno.ENOMEM or _short_of_memory()):
        raise Refused(f"not enough memory for reading {path}; give it more, or use fewer workers") from None


def _short_of_memory() -> bool:
    """Whether there is little left; a damaged file may ask for any amount, which says nothing of that."""
    try:
        import mmap

        mmap.mmap(-1, _TRIAL).close()
    except (OSError, ImportError, MemoryError):
        return True
    return False


def lacks_memory(error: BaseException) -> bool:
    """Whether memory is what failed; libraries that cannot be loaded and threads that cannot be started say so too."""
    if isinstance(error, OSError):
        return error.errno == errno.ENOMEM
    if isinstance(error, ImportError):
        return "failed to map segment" in str(error) or "annot allocate memory" in str(error)
    return isinstance(error, MemoryError) or (isinstance(error, RuntimeError) and "start new thread" in str(error))
