"""Errors of the package, on the lowest floor; imports nothing.

Bad values raise ``ValueError`` or ``TypeError`` (here or as a base class); every message is one line that names the
thing.
"""


class MaxentError(Exception):
    """Base class of all errors of this package."""


class ConfigError(MaxentError):
    """One or more problems in a config; ``str()`` gives one line per problem."""


class FormulaError(MaxentError, ValueError):
    """A formula that cannot be read; carries the text and the column (1-based) of the trouble.

    Parameters
    ----------
    message : str
        What was found and what was expected.
    text : str
        The formula.
    column : int
        Column of the trouble, counted from 1.
    """

    def __init__(self, message, text="", column=0):
        super().__init__(message)
        self.text = text
        self.column = column


class ResourceError(MaxentError, MemoryError):
    """A request that would need more memory than the machine has; refused before anything is allocated."""


class SolveError(MaxentError):
    """Raised by ``Result.require()`` when there is no solution; ``result`` holds the verdict and the certificate.

    Parameters
    ----------
    result : Result
        The result that is not a solution.
    """

    def __init__(self, result):
        super().__init__(result.message)
        self.result = result
