"""Choices under rules as spins, and back.

A bit that is 1 is spin -1. After the bits of the variables come slack bits: a rule ``least <= sum <= most`` is kept by
Q (sum - least - slack)^2, with as much slack as there is room between the bounds, so that its penalty is 0 for some
slack if the rule is kept and Q at least if it is not.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.problem.choice_repair import repaired
from patchwalk.problem.choices import F64, UNBOUNDED, Choices, Rule, Variable
from patchwalk.problem.ising import ProblemError
from patchwalk.problem.meanings import I8, Encoding, by_name
from patchwalk.problem.penalties import count_bits, count_coefficients


@dataclass(frozen=True, eq=False)
class Kept:
    """How a rule is kept: by pairs that must not both be 1, or by a square with ``slack`` room from ``first_bit``."""

    rule: Rule
    pairwise: bool
    least: int
    slack: int
    first_bit: int

    @property
    def steps(self) -> list[int]:
        return count_coefficients(self.slack)


@dataclass(frozen=True, eq=False)
class ChosenValues(Encoding):
    """The value of every variable by name: true or false, a whole number, or one of its values."""

    choices: Choices
    kept: tuple[Kept, ...]
    size: int
    main = "choices"

    def read(self, spins: I8) -> dict[str, Any]:
        """The values; a list where a variable has none or several."""
        bits = (1 - spins) // 2
        return {"choices": {one.name: _value_of(one, self._features(one, bits)) for one in self.choices.variables}}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        given = by_name(value, self.main, [one.name for one in self.choices.variables])
        active = self.active(value)
        broken = [
            f"{one.name} has {len(said) or 'no'} values{': ' * bool(said)}{', '.join(map(str, said))}"
            for one, said in zip(self.choices.variables, given, strict=True)
            if isinstance(said, list)
        ]
        for rule in self.choices.rules:
            total = rule.total(active)
            if rule.excess(total):
                broken.append(f"{rule.name}: the total is {total}, allowed {bounds_of(rule)}")
        return self.choices.cost(active), tuple(broken)

    def encode(self, value: Mapping[str, Any]) -> I8:
        active = self.active(value)
        bits = np.zeros(self.size, np.int8)
        for one in self.choices.variables:
            own = active[one.first_feature : one.first_feature + one.feature_count]
            bits[one.first_bit : one.first_bit + one.bit_count] = _bits_of(one, own)
        for kept in self.kept:
            room = min(max(kept.rule.total(active) - kept.least, 0), kept.slack)
            bits[kept.first_bit : kept.first_bit + len(kept.steps)] = count_bits(room, kept.slack)
        return (1 - 2 * bits).astype(np.int8)

    def settle(self, spins: I8) -> I8:
        return self.encode(self.read(spins))

    def active(self, value: Mapping[str, Any]) -> F64:
        """All features, f64 (f,), of a value; raises :class:`ProblemError` for one that a variable cannot have."""
        given = by_name(value, self.main, [one.name for one in self.choices.variables])
        active = np.zeros(len(self.choices.linear))
        for one, said in zip(self.choices.variables, given, strict=True):
            for place in _places_of(one, said):
                active[one.first_feature + place] = 1.0
        return active

    def mend(self, spins: I8) -> I8:
        """Variables one after another take the value that breaks rules least, then costs least."""
        features = repaired(self.choices, self.active(self.read(spins)))
        return spins if features is None else self.encode({"choices": self._values(features)})

    def _values(self, active: F64) -> dict[str, Any]:
        values = {}
        for one in self.choices.variables:
            own = active[one.first_feature : one.first_feature + one.feature_count]
            values[one.name] = _value_of(one, np.flatnonzero(own > 0).tolist())
        return values

    def _features(self, one: Variable, bits: I8) -> list[int]:
        """Which features of a variable are 1."""
        own = bits[one.first_bit : one.first_bit + one.bit_count].tolist()
        if one.form in ("free", "one-hot"):
            return [place for place, bit in enumerate(own) if bit]
        if one.form == "binary":
            steps = count_coefficients(one.feature_count - 1)
            return [sum(step * bit for step, bit in zip(steps, own, strict=True))]
        walls = [1, *own, 0]
        return [place for place in range(one.feature_count) if walls[place] > walls[place + 1]]


def _value_of(one: Variable, places: list[int]) -> Any:
    if one.values is None:
        return one.least + sum(one.steps[place] for place in places)
    if one.form == "free":
        return bool(places)
    named = [one.values[place] for place in places]
    return named[0] if len(named) == 1 else named


def _places_of(one: Variable, said: Any) -> list[int]:
    """The features of a variable that are 1 for what an answer says of it."""
    if one.values is None:
        if not isinstance(said, int | np.integer) or isinstance(said, bool) or not one.least <= said <= one.most:
            raise ProblemError(f"{one.name} is {said!r}; expected a whole number from {one.least} to {one.most}")
        bits = count_bits(int(said) - one.least, one.most - one.least)
        return [place for place, bit in enumerate(bits) if bit]
    if one.form == "free":
        if not isinstance(said, bool | int | np.integer | np.bool_) or said not in (0, 1):
            raise ProblemError(f"{one.name} is {said!r}; expected true or false")
        return [0] if said else []
    return [_place_of(one, each) for each in (said if isinstance(said, list) else [said])]


def _place_of(one: Variable, said: Any) -> int:
    for place, value in enumerate(one.values or ()):
        if said == value or str(said) == str(value):
            return place
    raise ProblemError(f"{one.name} is {said!r}; expected one of: {', '.join(map(str, one.values or ()))}")


def _bits_of(one: Variable, active: F64) -> list[int]:
    """The bits of a variable whose features are these."""
    on = np.flatnonzero(active > 0).tolist()
    if one.form in ("free", "one-hot"):
        return [int(place in on) for place in range(one.bit_count)]
    if len(on) != 1:
        raise ProblemError(f"{one.name} has {len(on)} values, which its {one.form} form cannot express")
    if one.form == "binary":
        return count_bits(on[0], one.feature_count - 1)
    return [int(place < on[0]) for place in range(one.bit_count)]


def bounds_of(rule: Rule) -> str:
    if rule.least == -UNBOUNDED or rule.most == UNBOUNDED:
        return f"at most {rule.most}" if rule.least == -UNBOUNDED else f"at least {rule.least}"
    return str(rule.least) if rule.least == rule.most else f"{rule.least} to {rule.most}"
