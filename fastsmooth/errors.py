"""What fastsmooth refuses, and how it says so.

Every refusal is one sentence with four parts: the argument, what it must be, what was received,
and what to do about it. The command line prints the sentence and leaves with `exit_code`.
"""

EXIT_OK = 0
EXIT_BUG = 1
EXIT_REFUSED = 2
EXIT_INTERRUPTED = 130


class FastsmoothError(Exception):
    """Base of every error that fastsmooth raises on purpose."""

    exit_code = EXIT_REFUSED


class InputError(FastsmoothError):
    """An argument or the data cannot be used.

    Parameters
    ----------
    argument : str
        The option or argument at fault, as the caller wrote it (``--x``, ``DATA``).
    requirement : str
        What it must be, continuing "must ...".
    received : str
        What was found instead.
    remedy : str
        What the caller can do.

    Examples
    --------
    >>> str(InputError("--x", "name a column of DATA", "'wetbulb' is none", "use 'wet_bulb_c'"))
    "--x must name a column of DATA, but 'wetbulb' is none; use 'wet_bulb_c'."
    """

    def __init__(self, argument: str, requirement: str, received: str, remedy: str) -> None:
        self.argument = argument
        self.requirement = requirement
        self.received = received
        self.remedy = remedy
        super().__init__(f"{argument} must {requirement}, but {received}; {remedy}.")

    def __reduce__(self) -> tuple[type, tuple[str, str, str, str]]:
        return type(self), (self.argument, self.requirement, self.received, self.remedy)


class ReadError(InputError):
    """Data that exist could not be read whole: damaged, truncated, or changed while being read."""


class WriteError(InputError):
    """A result could not be written; nothing half-written was left behind."""
