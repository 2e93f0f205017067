"""Calls of an anneal with noise on: what the device shows, what it would show without noise, and what that takes.

A call whose controls are imperfect evolves twice, as the device does and without noise for the hit probability to
compare with; misread spins need no second evolution. Dephasing is not followed along a schedule.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.subsolvers.contract import ClusterBatch, Forecast, Proposals, Work, refuse_oversize

if TYPE_CHECKING:
    from patchwalk.subsolvers.anneal_calls import Anneal


def noisy_proposals(anneal: Anneal, batch: ClusterBatch) -> Proposals:
    """The answer to a batch, with the noise of each call's own seed."""
    refuse_oversize(anneal.name, batch.size, anneal.max_spins, "exact simulation (2^k amplitudes)")
    acting, laws = anneal.noise.disturbed(batch), np.empty((len(batch), 1, 1 << batch.size))
    seen = anneal.measured(batch, acting, laws)
    if acting is batch:
        return anneal.noise.reported(batch, seen, seen, laws[:, 0])
    quiet = anneal.measured(batch, batch)
    answer = anneal.noise.reported(batch, seen, quiet, laws[:, 0])
    return replace(answer, work=_both(seen.work, quiet.work))


def noisy_forecast(anneal: Anneal, batch: ClusterBatch) -> Forecast:
    """Bytes and work of :func:`noisy_proposals`."""
    refuse_oversize(anneal.name, batch.size, anneal.max_spins, "exact simulation (2^k amplitudes)")
    quiet = anneal.quiet_forecast(batch)
    laws_and_levels = (len(batch) + 2) * (8 << batch.size)
    work = quiet.work if not anneal.noise.disturbs else _both(quiet.work, quiet.work)
    return Forecast(bytes=quiet.bytes + laws_and_levels, work=work)


def _both(one: Work, other: Work) -> Work:
    """The work of a call that evolves twice and is measured once."""
    assert one.amplitude_updates is not None
    assert other.amplitude_updates is not None
    return replace(one, amplitude_updates=one.amplitude_updates + other.amplitude_updates)
