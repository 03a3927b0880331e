"""The one way in which the core refuses: a stable code, a sentence for people, and the place."""

from __future__ import annotations

from spectra.core.types import Problem


class CoreError(ValueError):
    """Input that the core cannot work with; `problem` says what, where and what to do about it."""

    def __init__(
        self, code: str, message: str, *, line: int | None = None, remedy: str = "", question: str | None = None
    ):
        super().__init__(message)
        self.problem = Problem(code=code, message=message, line=line, remedy=remedy, question=question)
