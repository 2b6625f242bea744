"""Files that appear only when they are whole."""

import errno
import os
import uuid
from contextlib import contextmanager


@contextmanager
def whole_file(path, beside=()):
    """A name to write to for the block; the file takes its own once the block ends well.

    Parameters
    ----------
    path : str
        Where the file will be.
    beside : sequence of str
        What is added to the name in files that a writer keeps beside it; they go in any case.

    Raises
    ------
    OSError
        See `put_in_place`.
    """
    folder, name = os.path.split(path)
    stem, ending = os.path.splitext(name)
    waiting = os.path.join(folder, f".{stem}-{uuid.uuid4().hex[:8]}{ending}")
    try:
        yield waiting
        put_in_place(waiting, path)
    finally:
        for left_over in (waiting, *(waiting + more for more in beside)):
            if os.path.exists(left_over):
                os.remove(left_over)


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
