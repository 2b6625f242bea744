"""The errors that the numeric core raises on purpose."""

from .words import Words


class InputError(ValueError):
    """The data or a setting cannot be worked with.

    The message names the parameter or the data, says what was found and what to do.

    Parameters
    ----------
    template : str
        The message, with a pair of braces for each value.
    values : tuple
        As those of `Words`.
    """

    def __init__(self, template, *values):
        # all arguments, so that the error arrives whole from a worker process
        super().__init__(template, *values)
        self.words = template if isinstance(template, Words) else Words(template, *values)

    def __str__(self):
        return str(self.words)


class CancelledError(Exception):
    """The user asked to stop; nothing that was begun is to be kept."""
