"""Files that appear only when they are whole."""

import errno
import os
import uuid


def partial_path(path):
    """A name beside the final one that a half-written file carries."""
    folder, name = os.path.split(path)
    stem, ending = os.path.splitext(name)
    return os.path.join(folder, f".{stem}-{uuid.uuid4().hex[:8]}{ending}")


def put_in_place(waiting, path):
    """Give a whole file its final name; a file that carried it is replaced.

    Raises
    ------
    OSError
        The name belongs to a folder or to a file that may not be written.
    """
    if os.path.exists(path) and not os.access(path, os.W_OK):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), path)
    os.replace(waiting, path)
