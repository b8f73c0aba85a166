"""Errors raised by the solver.

    SolverError
    +-- ModelError         a parameter lies outside what the model allows
    +-- QuestionError      the model is fine, what is asked of it is not
    +-- ConvergenceError   the bound asked for was not reached within the size allowed

Every error names the field, the value that was given and what would be accepted,
so that whoever shows it can say what to change.
"""

from __future__ import annotations


class SolverError(Exception):
    """Base of all solver errors.

    Attributes: ``field`` (name of the offending quantity), ``value`` (as given),
    ``allowed`` (the accepted range, in words) and ``message``.
    """

    def __init__(self, field: str, value: object, allowed: str, message: str | None = None) -> None:
        self.field = field
        self.value = value
        self.allowed = allowed
        self.message = message or f"{field} = {value!r} is not accepted; allowed: {allowed}"
        super().__init__(self.message)

    def __reduce__(self) -> tuple[type[SolverError], tuple[str, object, str, str]]:
        # errors travel between processes: rebuild them from all four facts
        return type(self), (self.field, self.value, self.allowed, self.message)


class ModelError(SolverError):
    """A model parameter is outside its domain."""


class QuestionError(SolverError):
    """A tolerance, level count or other request is outside its domain."""


class ConvergenceError(SolverError):
    """The requested bound needs a larger calculation than is allowed."""
