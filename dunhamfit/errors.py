"""Every error and warning that dunhamfit raises, and the exit code each one means.

One root for errors and one for warnings, so that a caller can catch or filter
them all; each class also derives from the standard exception whose meaning it
shares. Numbers travel as attributes, not only inside the text.
"""


class DunhamfitError(Exception):
    """Root of all errors; `exit_code` is what the command line returns for it."""

    exit_code = 1


class UsageError(DunhamfitError, ValueError):
    """The call, the command line or the job file asks for something that does not exist."""

    exit_code = 2


class InputFaults(DunhamfitError, ValueError):
    """The input files hold faults.

    Attributes
    ----------
    faults : tuple
        Every fault found, in the order of the files (`dunhamfit.lines.faults.Fault`).
    """

    exit_code = 3

    def __init__(self, faults, summary: str = ""):
        self.faults = tuple(faults)
        super().__init__(summary or "\n".join(str(fault) for fault in self.faults))


class CannotDetermine(DunhamfitError, ValueError):
    """The data cannot determine the model.

    Attributes
    ----------
    terms : tuple of str
        Names of the parameters that cannot be told from the others.
    condition : float
        Condition number of the scaled design matrix; infinite where the structure alone decides.
    """

    exit_code = 4

    def __init__(self, message: str, *, terms=(), condition: float = float("inf")):
        self.terms = tuple(terms)
        self.condition = condition
        super().__init__(message)


class NotConverged(DunhamfitError, RuntimeError):
    """An iteration stopped before it settled; `state` says where.

    Attributes
    ----------
    state : dict
        The numbers reached, by name.
    """

    exit_code = 5

    def __init__(self, message: str, *, state=None):
        self.state = dict(state or {})
        super().__init__(message)


class ArchiveProblem(DunhamfitError, OSError):
    """The archive cannot be read or written; what it held before is untouched."""

    exit_code = 6


class DunhamfitWarning(UserWarning):
    """Root of all warnings."""
