"""The errors of this room."""

from __future__ import annotations

import errno

MEND = "to mend: render again with --resume (resume=True), which draws missing and damaged parts anew"


class EnsembleError(ValueError):
    """An ensemble that cannot be made, read or trusted; the message says why and how to mend it."""


class InUse(EnsembleError):
    """Another process is drawing into the folder; it may be asked again."""


def system_sentence(error: OSError, doing: str) -> str:
    """What the operating system refused, in a sentence."""
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return f"no space left while {doing}; free some space, then go on with --resume (resume=True)"
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return f"no permission for {doing} ({error.strerror}); mend the permissions or choose another OUT"
    if error.errno == errno.EFBIG:
        return f"a file grew above the limit of this process or file system while {doing}; raise the limit"
    return f"the system refused {doing}: {error.strerror or error}"
