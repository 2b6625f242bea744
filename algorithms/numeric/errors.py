"""The errors that the numeric core raises on purpose."""


class InputError(ValueError):
    """The data or a setting cannot be worked with.

    The message names the parameter or the data, says what was found and what to do.
    """


class CancelledError(Exception):
    """The user asked to stop; nothing that was begun is to be kept."""
