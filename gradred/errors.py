"""The four kinds of refusal, each told in three lines: what is wrong, where, and the cure.

A refusal is expected and is shown to the user without a traceback (exit status 2);
any other exception is a bug of gradred and shows its traceback. Several refusals found by one check
travel together in a builtin ``ExceptionGroup``.
"""

from __future__ import annotations


class GradredError(Exception):
    """A refusal with its place and its cure.

    Parameters
    ----------
    what : str
        What is wrong, with the value in it.
    where : str
        File and line, stage, flight line and time: as much as is known.
    cure : str
        What the user can do about it.
    """

    def __init__(self, what: str, *, where: str, cure: str) -> None:
        super().__init__(what, where, cure)
        self.what = what
        self.where = where
        self.cure = cure

    def __str__(self) -> str:
        return f"{type(self).__name__}: {self.what}\n  where: {self.where}\n  cure:  {self.cure}"


class PipelineFileError(GradredError):
    """The pipeline file, or the chain it describes, cannot be run."""


class SurveyError(GradredError):
    """A part of the survey lacks what a stage needs, or breaks the data contract."""


class ReadingsError(GradredError):
    """A delivered file cannot be vouched for."""


class FitError(GradredError):
    """An estimate cannot be made from these data, or did not converge."""
