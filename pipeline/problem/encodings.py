"""Original problems as spins, one function for each kind; what they return knows the way back.

Every ``encode_...`` gives a :class:`~patchwalk.problem.ising.Problem` whose ``encoding`` decodes configurations into
the user's words and checks them against the original problem. For every configuration that is an answer the energy
equals the objective (with the sign that ``KINDS`` states), constant included. Where there are constraints, every
configuration of least energy keeps them: the penalties are proved large enough in the docstrings.
"""

from __future__ import annotations

from patchwalk.problem.kinds.balance import encode_balanced_partition
from patchwalk.problem.kinds.clauses import encode_max2sat, encode_max3sat
from patchwalk.problem.kinds.colouring import encode_colouring
from patchwalk.problem.kinds.partition import encode_partition
from patchwalk.problem.kinds.qubo import encode_qubo
from patchwalk.problem.kinds.vertices import encode_independent_set, encode_vertex_cover

__all__ = [
    "encode_balanced_partition",
    "encode_colouring",
    "encode_independent_set",
    "encode_max2sat",
    "encode_max3sat",
    "encode_partition",
    "encode_qubo",
    "encode_vertex_cover",
]
