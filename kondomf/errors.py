"""Errors that a user can mend. The command line prints their text and exits with code 2."""


class InputError(ValueError):
    """Wrong or impossible input. The message names the place, the value, what is legal and the remedy."""
