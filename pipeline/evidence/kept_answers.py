"""Answers of backends that do not promise determinism: kept before they are used, and never asked for twice.

A resumed run comes to the rounds after its last checkpoint anew. A deterministic subsolver then gives the same answers;
for any other the answers are written down, call by call under the call's seed, before the search may use them. They are
forgotten once a checkpoint lies behind them.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

import numpy as np

from patchwalk.engine import Answered, answers
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.runfile import RunFile
from patchwalk.subsolvers.contract import WORK_FIELDS, ClusterBatch, Proposals, Subsolver, Work
from patchwalk.workers import Workers

OPTIONAL = ("log_ratio", "times", "hit_probability", "noiseless_hit")
COUNTED = {"shots", "amplitude_updates", "spin_updates", "energies", "table_entries"}


class KeptAnswers:
    """Asks on behalf of one run, and remembers what must not be asked again."""

    def __init__(self, file: RunFile, run: int) -> None:
        self._file, self._run = file, run

    def answers(self, subsolver: Subsolver, batch: ClusterBatch, workers: Workers) -> Iterator[Answered]:
        """The batch slice by slice, as :func:`patchwalk.engine.answers`; what is known already comes first."""
        if subsolver.deterministic:
            yield from answers(subsolver, batch, workers)
            return
        known = 0
        while known < len(batch) and (recalled := self._recall(int(batch.seeds[known]))) is not None:
            yield Answered(known, batch.rows(known, known + 1), *recalled)
            known += 1
        if known == len(batch):
            return
        for answered in answers(subsolver, batch.rows(known, len(batch)), workers):
            self._keep(answered)
            yield answered._replace(start=known + answered.start)

    def _recall(self, seed: int) -> tuple[Proposals, float] | None:
        query = "SELECT answer FROM kept_answers WHERE run = ? AND seed = ?"
        found = self._file.database.execute(query, (self._run, seed)).fetchone()
        return None if found is None else _from_text(found[0])

    def _keep(self, answered: Answered) -> None:
        rows = [(self._run, int(seed), _as_text(answered, row)) for row, seed in enumerate(answered.batch.seeds)]
        try:
            with self._file.database as database:
                database.execute("BEGIN")
                database.executemany("INSERT OR REPLACE INTO kept_answers VALUES (?,?,?)", rows)
        except Exception as error:
            raise RunFileError(f"the run file {self._file.path} could not be written any further: {error}") from error


def _as_text(answered: Answered, row: int) -> str:
    """One call's answer as JSON; numbers come back to the last bit."""
    proposals = answered.proposals
    work = {name: getattr(proposals.work, name) for name in WORK_FIELDS}
    return json.dumps({
        "outcomes": proposals.outcomes[row].tolist(),
        "status": int(proposals.status[row]),
        "message": proposals.messages[row],
        "seconds": answered.seconds / len(answered.batch),
        "work": {name: values[row].item() for name, values in work.items() if values is not None},
        **{name: _value(getattr(proposals, name), row) for name in OPTIONAL},
    })  # fmt: skip


def _value(values: np.typing.NDArray[Any] | None, row: int) -> Any:
    return None if values is None else values[row].tolist()


def _from_text(text: str) -> tuple[Proposals, float]:
    kept = json.loads(text)
    work: dict[str, Any] = {
        name: np.array([value], np.int64 if name in COUNTED else np.float64) for name, value in kept["work"].items()
    }
    optional = {name: None if kept[name] is None else np.array([kept[name]], np.float64) for name in OPTIONAL}
    proposals = Proposals(
        outcomes=np.array([kept["outcomes"]], np.int8), work=Work(**work),
        status=np.array([kept["status"]], np.uint8), messages=(kept["message"],), **optional,
    )  # fmt: skip
    return proposals, kept["seconds"]
