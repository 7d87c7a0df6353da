"""The errors of this room."""

from __future__ import annotations

import errno

MEND = "to mend: render again with --resume (resume=True), which draws missing and damaged parts anew"


class EnsembleError(ValueError):
    """An ensemble that cannot be made, read or trusted; the message says why and how to mend it."""


class Damaged(EnsembleError):
    """A file of an ensemble is damaged, or is not one."""


class InUse(EnsembleError):
    """Another process is drawing into the folder; it may be asked again."""


RESUME = "then go on with --resume (resume=True)"


def system_sentence(error: OSError, doing: str) -> str:
    """What the operating system refused, in a sentence."""
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return f"no space left while {doing}; free some space, {RESUME}"
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return f"no permission for {doing} ({error.strerror}); mend the permissions, {RESUME}, or choose another OUT"
    if error.errno == errno.EFBIG:
        return f"a file grew above the limit of this process or file system while {doing}; raise the limit, {RESUME}"
    if error.errno in (errno.EMFILE, errno.ENFILE):
        return f"too many open files while {doing}; raise the limit (ulimit -n), or use fewer workers, {RESUME}"
    return f"the system refused {doing}: {error.strerror or error}"


def lacks_memory(error: BaseException) -> bool:
    """Whether memory is what failed; libraries that cannot be loaded and threads that cannot be started say so too."""
    if isinstance(error, OSError):
        return error.errno == errno.ENOMEM
    if isinstance(error, ImportError):
        return "failed to map segment" in str(error) or "annot allocate memory" in str(error)
    return isinstance(error, MemoryError) or (isinstance(error, RuntimeError) and "start new thread" in str(error))
