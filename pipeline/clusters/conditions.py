"""Conditions in settings, such as ``stage > 0.5 and frustration >= 0.3``: comparisons joined by ``and``, and no more.

condition  = chain ("and" chain)*
chain      = operand (sign operand)+          0.2 < stage <= 0.5 is two comparisons
operand    = number | name
sign       = < <= > >= == !=
"""

from __future__ import annotations

import difflib
import operator
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

TOKEN = re.compile(
    r"\s*(?:(?P<number>[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)(?![\w.])"
    r"|(?P<name>[^\W\d]\w*)|(?P<sign><=|>=|==|!=|<|>)|(?P<wrong>\S+))"
)

SIGNS: Mapping[str, Callable[[Any, Any], Any]] = {
    "<": operator.lt,
    "<=": operator.le,
    ">": operator.gt,
    ">=": operator.ge,
    "==": operator.eq,
    "!=": operator.ne,
}

SHAPE = "write comparisons joined by and, such as stage > 0.5 and k <= 12"


class ConditionError(ValueError):
    """A condition that cannot be understood; the message quotes it and says what was expected."""


class Comparison(NamedTuple):
    """Two operands, each a name or a number, and the sign between them."""

    left: str | float
    sign: str
    right: str | float


@dataclass(frozen=True)
class Condition:
    """A condition as written and as understood."""

    text: str
    comparisons: tuple[Comparison, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """The quantities it speaks of, in order."""
        sides = [side for comparison in self.comparisons for side in (comparison.left, comparison.right)]
        return tuple(dict.fromkeys(side for side in sides if isinstance(side, str)))

    def holds(self, values: Mapping[str, float | npt.NDArray[np.float64]], rows: int) -> npt.NDArray[np.bool_]:
        """Whether it holds, bool (rows,), for values that are numbers or f64 (rows,); nan compares as false."""
        result = np.ones(rows, np.bool_)
        for left, sign, right in self.comparisons:
            sides = [np.asarray(values[side] if isinstance(side, str) else side) for side in (left, right)]
            result &= SIGNS[sign](*sides) & ~np.isnan(sides[0]) & ~np.isnan(sides[1])
        return result


def condition_from(text: str, known: Sequence[str]) -> Condition:
    """The condition written in ``text``, which may speak of the ``known`` quantities.

    Raises :class:`ConditionError` with what stands in the wrong place, or the nearest known name.

    >>> condition_from("0.2 < stage <= 0.5 and k == 12", ["stage", "k"]).comparisons[1]
    Comparison(left='stage', sign='<=', right=0.5)
    """
    tokens = _Tokens(text, known)
    comparisons = list(_chain(tokens))
    while not tokens.ended:
        tokens.take_and()
        comparisons.extend(_chain(tokens))
    return Condition(text, tuple(comparisons))


def _chain(tokens: _Tokens) -> Iterator[Comparison]:
    left = tokens.operand()
    while True:
        sign, right = tokens.sign(), tokens.operand()
        if not isinstance(left, str) and not isinstance(right, str):
            raise tokens.wrong(f"{left:g} {sign} {right:g} compares two numbers; one side must be a quantity")
        yield Comparison(left, sign, right)
        if not tokens.at_sign:
            return
        left = right


class _Tokens:
    """The words of a condition, taken one after the other."""

    def __init__(self, text: str, known: Sequence[str]) -> None:
        self.text, self.known, self.place = text, known, 0
        self.words = [(str(match.lastgroup), match.group().strip()) for match in TOKEN.finditer(text.rstrip())]
        if not self.words:
            raise self.wrong("is empty; leave it out for a case that always holds")

    @property
    def ended(self) -> bool:
        return self.place == len(self.words)

    @property
    def at_sign(self) -> bool:
        return not self.ended and self.words[self.place][0] == "sign"

    def operand(self) -> str | float:
        kind, word = self._next("a quantity or a number")
        if kind == "number":
            return float(word)
        if kind != "name" or word == "and":
            raise self.wrong(f"{word!r} stands where a quantity or a number is expected; {SHAPE}")
        if word in ("or", "not"):
            raise self.wrong(f"there is no {word!r}; {SHAPE}, and give another case for each alternative")
        if word not in self.known:
            close = difflib.get_close_matches(word, self.known, n=1, cutoff=0.5)
            hint = f"did you mean {close[0]!r}? There" if close else "there"
            raise self.wrong(f"nothing is called {word!r}; {hint} are: {', '.join(self.known)}")
        return word

    def sign(self) -> str:
        kind, word = self._next(f"one of {' '.join(SIGNS)}")
        if kind != "sign":
            hint = "equality is written ==" if word.startswith("=") else SHAPE
            raise self.wrong(f"{word!r} stands where one of {' '.join(SIGNS)} is expected; {hint}")
        return word

    def take_and(self) -> None:
        _, word = self._next("and")
        if word != "and":
            hint = ", and give another case for each alternative" if word in ("or", "|", "||") else ""
            raise self.wrong(f"{word!r} stands where and is expected; {SHAPE}{hint}")

    def wrong(self, sentence: str) -> ConditionError:
        return ConditionError(f"{self.text!r}: {sentence}")

    def _next(self, expected: str) -> tuple[str, str]:
        if self.ended:
            raise self.wrong(f"ends where {expected} is expected; {SHAPE}")
        self.place += 1
        return self.words[self.place - 1]
