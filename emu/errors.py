"""The one error class that a person at the keyboard can cause and cure."""

__all__ = ["UserError"]


class UserError(ValueError):
    """Report a mistake in a user's input by one line that names the place and the cure.

    The command lines print it as ``error: ...`` on stderr and exit with code 2. A mistake in the
    program itself raises anything else and keeps its traceback.

    Examples:
        >>> str(UserError("flares.ecsv, row 3: error is 0; give a positive 1-sigma error"))
        'flares.ecsv, row 3: error is 0; give a positive 1-sigma error'
    """

    def __init__(self, message: str) -> None:
        super().__init__(" ".join(message.split()))
