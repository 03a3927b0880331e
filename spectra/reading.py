"""Between what people answer and what the strict reader is told."""

from __future__ import annotations

from collections.abc import Mapping

from labsite.errors import BadInput
from spectra.core.types import AxisUnit, Ordinate, ReadOptions, Technique


def _columns(answer: object) -> tuple[int, ...]:
    """Column numbers from a list of them, or as they are typed: `2, 3`."""
    parts = answer.replace(",", " ").split() if isinstance(answer, str) else answer
    return tuple(int(column) for column in parts)


def read_options(answers: Mapping[str, object], technique: str) -> ReadOptions:
    """The reader's options from what a person answered; unknown words are refused."""
    try:
        return ReadOptions(
            x_unit=AxisUnit(answers["x_unit"]) if answers.get("x_unit") else None,
            ordinate=Ordinate(answers["ordinate"]) if answers.get("ordinate") else None,
            columns=_columns(answers["columns"]) if answers.get("columns") else None,
            technique=Technique(technique) if technique else None,
        )
    except (ValueError, TypeError):
        raise BadInput(
            "upload.answer_not_understood", "That answer is not one of the choices.", field="answer"
        ) from None
