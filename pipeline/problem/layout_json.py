"""Our JSON for problems with rules: choices to be made, what they cost, what must hold.

An object with these entries; ``layout`` and ``version`` come first, all others may be left out:

    {"layout": "patchwalk choices", "version": 1,
     "about": "any text; names in quotes are yours",
     "choices": {"Mon early": ["Ada", "Ben"], "Mon late": ["Ada", "Cleo"]},
     "yes or no": ["open on Sunday"],
     "numbers": {"loaves": [0, 40]},
     "forms": {"Mon early": "domain-wall"},
     "costs": [{"cost": 3, "if": [["Mon early", "Ada"]]},
               {"cost": 1.5, "if": [["Mon early", "Ben"], "open on Sunday"]}],
     "rules": [{"name": "Ada works at most once", "of": [["*", "Ada"]], "at most": 1},
               {"name": "enough bread", "of": ["loaves", "open on Sunday"], "times": [1, -12], "at least": 0}],
     "known": {"Mon early": "Ben", "Mon late": "Cleo", "open on Sunday": false, "loaves": 0}}

``choices`` each take one of their values; ``numbers`` are whole, from a least to a most. ``forms`` says how a choice
becomes spins: ``one-hot`` (unless stated), ``domain-wall`` or ``binary``. A *term* is the name of a yes-or-no or of a
number, or ``[choice, value]``, or, in rules, ``["*", value]``: every choice that has this value. A cost is a number
times one or two terms, or none. The total of the terms of a rule, each ``times`` a whole number if so stated, is
``exactly``, ``at least`` or ``at most`` so much, or both of the latter. ``known`` is an answer that keeps all rules, if
you have one: it helps. The sum of all costs is to be as small as can be.
"""

from __future__ import annotations

import contextlib
import difflib
import json
import re
from collections.abc import Iterable, Mapping
from typing import IO, Any, NoReturn

from patchwalk.problem.builder import ProblemBuilder, Term
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import PathLike, numbered_lines

LAYOUT = "patchwalk choices"
VERSION = 1
ENTRIES = ("layout", "version", "about", "choices", "yes or no", "numbers", "forms", "costs", "rules", "known")
LOOKED_AT = 4096
MOST_TERMS = 1_000_000


def is_ours(text: str) -> bool:
    """Whether a JSON text says, at its beginning, that it has this layout."""
    return re.search(rf'"layout"\s*:\s*"{LAYOUT}"', text[:LOOKED_AT]) is not None


def problem_from_json(text: str, place: str = "JSON") -> Problem:
    """The problem in a text of this layout; ``place`` names it in errors.

    Raises :class:`~patchwalk.problem.ising.ProblemError` that names the key at fault, or the line where the text is not
    JSON.
    """
    table = _parsed(text, place)
    reader = _Reader(place)
    reader.table("", table, ENTRIES)
    if table.get("layout") != LAYOUT:
        reader.fail("layout", f'is {table.get("layout")!r}; expected "{LAYOUT}"')
    if table.get("version") != VERSION or isinstance(table.get("version"), bool):
        reader.fail("version", f"is {table.get('version')!r}; this program reads version {VERSION}")
    reader.variables(table)
    reader.costs(table.get("costs", []))
    reader.rules(table.get("rules", []))
    known = table.get("known")
    if known is not None and not isinstance(known, dict):
        reader.fail("known", "is no object of names and values")
    try:
        problem = reader.builder.build(known)
    except ProblemError as error:
        raise ProblemError(f"{place}: {error}") from error
    problem.details["layout"] = table  # type: ignore[index] # a dict, made by the builder
    return problem


def text_of(problem: Problem) -> str:
    """The text of a problem that came from this layout; raises :class:`ProblemError` for any other."""
    if "layout" not in problem.details:
        raise ProblemError("only a problem that was read from our JSON can be written as such; keep its file")
    return json.dumps(problem.details["layout"], ensure_ascii=False, indent=1) + "\n"


def read(path: PathLike, kind: str | None = None) -> Problem:
    """The problem in a file of this layout, plain or ``.gz``; its one kind is ``constrained``."""
    if kind not in (None, "constrained"):
        raise ProblemError(f"{path}: this is our JSON of choices, kind constrained, but {kind} was asked for; drop it")
    with contextlib.closing(numbered_lines(path)) as lines:
        return problem_from_json("".join(text for _, text in lines), str(path))


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str] = ()) -> None:  # noqa: ARG001 - as all writers
    """Write the layout that a problem was read from; a recipe has no place in it."""
    stream.write(text_of(problem).encode())


def _parsed(text: str, place: str) -> dict[str, Any]:
    def without_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        table = dict(pairs)
        if len(table) < len(pairs):
            keys = [key for key, _ in pairs]
            twice = next(key for key in keys if keys.count(key) > 1)
            raise ProblemError(f"{place}: the key {_short(twice)} stands twice in one object; keep one")
        return table

    def refuse(word: str) -> NoReturn:
        raise ProblemError(f"{place}: {word} is no number that makes a cost")

    try:
        table = json.loads(text, object_pairs_hook=without_repeats, parse_constant=refuse)
    except json.JSONDecodeError as error:
        raise ProblemError(f"{place}, line {error.lineno}: not JSON: {error.msg}") from error
    except RecursionError as error:
        raise ProblemError(f"{place}: brackets are nested too deeply") from error
    except ValueError as error:
        if isinstance(error, ProblemError):
            raise
        raise ProblemError(f"{place}: a number is too long: {error}") from error
    if not isinstance(table, dict):
        raise ProblemError(f"{place}: expected an object, that is {{...}}")
    return table


def _short(value: Any) -> str:
    text = json.dumps(value, ensure_ascii=False)
    return text if len(text) <= 60 else text[:57] + "..."


class _Reader:
    """Hands the entries to a builder, one by one; errors name the key."""

    def __init__(self, place: str) -> None:
        self.place = place
        self.builder = ProblemBuilder()
        self.values: dict[str, list[Any]] = {}
        self.having: dict[str, list[str]] = {}
        self.terms = 0

    def fail(self, key: str, message: str) -> NoReturn:
        raise ProblemError(f"{self.place}: {key} {message}" if key else f"{self.place}: {message}")

    def table(self, key: str, given: Any, known: Iterable[str]) -> Mapping[str, Any]:
        """An object with no keys but the known ones."""
        if not isinstance(given, dict):
            self.fail(key, f"is {_short(given)}; expected an object, that is {{...}}")
        for name in given:
            if name not in known:
                close = difflib.get_close_matches(name[:60], known, 1)
                hint = f"; did you mean {close[0]!r}?" if close else f"; known are: {', '.join(known)}"
                self.fail(f"{key}.{name[:60]}" if key else name[:60], f"is not known{hint}")
        return given

    def items(self, key: str, given: Any) -> list[Any]:
        if not isinstance(given, list):
            self.fail(key, f"is {_short(given)}; expected a list, that is [...]")
        return given

    def variables(self, table: Mapping[str, Any]) -> None:
        """Everything that is to be decided."""
        choices, numbers, forms = (table.get(key, {}) for key in ("choices", "numbers", "forms"))
        for key, given in (("choices", choices), ("numbers", numbers), ("forms", forms)):
            if not isinstance(given, dict):
                self.fail(key, f"is {_short(given)}; expected an object of names")
        for name in forms:
            if name not in choices:
                self.fail(f'forms["{name[:60]}"]', f"is none of the choices{self._nearest(name, choices)}")
        for name, values in choices.items():
            key = f'choices["{name[:60]}"]'
            for value in self.items(key, values):
                if not isinstance(value, str | int | float) or isinstance(value, bool):
                    self.fail(key, f"has the value {_short(value)}; expected text or a number")
                self.having.setdefault(str(value), []).append(name)
            self._say(key, self.builder.choice, name, values, forms.get(name, "one-hot"))
            self.values[name] = values
        for place, name in enumerate(self.items("yes or no", table.get("yes or no", []))):
            self._say(f"yes or no[{place}]", self.builder.yes_no, name)
            self.values[name] = []
        for name, bounds in numbers.items():
            key = f'numbers["{name[:60]}"]'
            if len(self.items(key, bounds)) != 2:
                self.fail(key, "has to be a list of the least and the most")
            self._say(key, self.builder.number, name, *bounds)
            self.values[name] = []

    def costs(self, given: Any) -> None:
        for place, entry in enumerate(self.items("costs", given)):
            key = f"costs[{place}]"
            cost = self.table(key, entry, ("cost", "if"))
            number = cost.get("cost")
            if not isinstance(number, int | float) or isinstance(number, bool) or not abs(number) <= 1e100:
                self.fail(f"{key}.cost", f"is {_short(number)}; expected a number up to 1e100")
            terms = self.items(f"{key}.if", cost.get("if", []))
            said = [self._term(f"{key}.if[{number}]", term) for number, term in enumerate(terms)]
            self._say(f"{key}.if", self.builder.cost, number, *said)

    def rules(self, given: Any) -> None:
        for place, entry in enumerate(self.items("rules", given)):
            key = f"rules[{place}]"
            rule = self.table(key, entry, ("name", "of", "times", "exactly", "at least", "at most"))
            name = rule.get("name", f"rule {place + 1}")
            if not isinstance(name, str):
                self.fail(f"{key}.name", f"is {_short(name)}; expected text")
            least, most = rule.get("at least"), rule.get("at most")
            if "exactly" in rule:
                if least is not None or most is not None:
                    self.fail(f"{key}.exactly", "stands beside another bound; keep one")
                least = most = rule["exactly"]
            terms, times = self._rule_terms(key, rule)
            self._say(key, self.builder.total, terms, least, most, times=times, name=name)

    def _rule_terms(self, key: str, rule: Mapping[str, Any]) -> tuple[list[Term], list[Any]]:
        given = self.items(f"{key}.of", rule.get("of"))
        factors = self.items(f"{key}.times", rule.get("times", [1] * len(given)))
        if len(factors) != len(given):
            self.fail(f"{key}.times", f"has {len(factors)} numbers for {len(given)} terms; give one each")
        terms: list[Term] = []
        times: list[Any] = []
        for number, (term, factor) in enumerate(zip(given, factors, strict=True)):
            where = f"{key}.of[{number}]"
            if isinstance(term, list) and len(term) == 2 and term[0] == "*":
                names = self.having.get(str(term[1]), [])
                if not names:
                    self.fail(where, f"stands for every choice with {_short(term[1])}, but there is none"
                                     f"{self._nearest(str(term[1]), self.having)}")  # fmt: skip
                terms += [(name, term[1]) for name in names]
                times += [factor] * len(names)
            else:
                terms.append(self._term(where, term))
                times.append(factor)
        self.terms += len(terms)
        if self.terms > MOST_TERMS:
            self.fail(key, f"brings the rules beyond {MOST_TERMS} terms; state fewer")
        return terms, times

    def _term(self, key: str, given: Any) -> Term:
        """A term; what is wrong with it is said with the key and the nearest name."""
        name = given[0] if isinstance(given, list) and given else given
        if not isinstance(name, str) or (isinstance(given, list) and len(given) != 2):
            self.fail(key, f"is {_short(given)}; expected a name, or [choice, value]")
        if name not in self.values:
            self.fail(key, f"speaks of {_short(name)}, which is not stated{self._nearest(name, self.values)}")
        if isinstance(given, str):
            if self.values[name]:
                self.fail(key, f"is the choice {_short(name)}; expected [{_short(name)}, value]")
            return name
        known = list(map(str, self.values[name]))
        if not known:
            self.fail(key, f"gives {_short(name)} a value, but it is no choice; say its name alone")
        if isinstance(given[1], bool) or str(given[1]) not in known:
            said = f"{_short(given[1])} is no value of {_short(name)}"
            self.fail(key, f"{said}{self._nearest(str(given[1]), known) or '; it has: ' + ', '.join(known[:20])}")
        return name, given[1]

    def _nearest(self, word: str, known: Iterable[str]) -> str:
        close = difflib.get_close_matches(word[:60], list(known)[:2000], 1)
        return f"; did you mean {close[0]!r}?" if close else ""

    def _say(self, key: str, say: Any, *given: Any, **named: Any) -> None:
        """Tell the builder, and put the key before what it says against it."""
        try:
            say(*given, **named)
        except ProblemError as error:
            self.fail(f"{key}:", str(error))
