"""What a password must not be, beyond the rules that the framework brings."""

from __future__ import annotations

import re
from collections.abc import Iterator

from django.contrib.auth.password_validation import CommonPasswordValidator
from django.core.exceptions import ValidationError

from .models import User, fold_username

PROGRAM_NAME = "bandledger"
SHORTEST_NAME = 3
_BETWEEN_WORDS = re.compile(r"[\W_]+")


class RepeatedWordValidator:
    """Refuses one common word, the user name or the program's name repeated: long, but among the first guesses.

    NIST SP 800-63B-4, section 3.1.1.2: compared with a list of commonly used and expected values, context-specific
    words included. Signs between the words and figures around them do not help.
    """

    def __init__(self) -> None:
        self.common = CommonPasswordValidator().passwords

    def validate(self, password: str, user: User | None = None) -> None:
        names = {PROGRAM_NAME}
        if user is not None:
            name = _BETWEEN_WORDS.sub("", fold_username(user.username))
            names |= {name} if len(name) >= SHORTEST_NAME else set()
        plain = _BETWEEN_WORDS.sub("", password.casefold())
        for text in {plain, plain.strip("0123456789")}:
            for part in repeated_parts(text):
                if part in self.common or part in names or part.strip("0123456789") in names:
                    raise ValidationError(self.get_help_text(), code="password_repeats_a_word")

    def get_help_text(self) -> str:
        return "This password repeats one word that is easily guessed: use several different words."


def repeated_parts(text: str) -> Iterator[str]:
    """Every part of which `text` is a repetition, twice at least; the last one may be cut short."""
    for length in range(1, len(text) // 2 + 1):
        part = text[:length]
        if (part * (len(text) // length + 1))[: len(text)] == text:
            yield part
