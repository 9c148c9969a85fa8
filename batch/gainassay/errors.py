"""What may go wrong, and the exit status that says so."""


class GainassayError(Exception):
    """A fault told to the user in one message: what, where, and what to do.

    Subclasses set `exit_status`; the command line prints the message and never a traceback.
    """

    exit_status = 1


class InputError(GainassayError):
    """A command, file, table or topology that cannot be used; nothing has been written."""

    exit_status = 2


class ConditionMet(GainassayError):  # noqa: N818 - not an error: the run is done, and told apart by its status
    """The work is done, but a condition asked for with `--fail-on` came true."""

    exit_status = 3
