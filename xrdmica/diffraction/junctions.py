"""Which layer follows which: Markov statistics of stacks of several kinds of layers, with a memory of up to three layers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import StructureError

__all__ = ["Junctions", "markov_junctions", "ordered_junctions", "random_junctions", "two_kind_junctions"]

_MAX_REICHWEITE = 3


@dataclass(frozen=True, eq=False)
class Junctions:
    """Statistics of the layer sequence: a chain of states, each of which ends in one kind of layer.

    With a memory of one layer the states are the kinds themselves. With a longer memory several states end in the same kind
    and differ in what came before.

    Attributes
    ----------
    proportions : ndarray, shape (q,)
        Share of each state, sum 1.
    probabilities : ndarray, shape (q, q)
        Probability that state j follows state i; rows sum to 1, and proportions @ probabilities gives proportions again.
    states : ndarray of int, shape (q,), optional
        Kind of layer that each state ends in; left out, state i is kind i.
    """

    proportions: NDArray[np.float64]
    probabilities: NDArray[np.float64]
    states: NDArray[np.int64] | None = None

    @property
    def kinds(self) -> NDArray[np.int64]:
        """Kind of layer of each state, shape (q,)."""
        return np.arange(self.proportions.size, dtype=np.int64) if self.states is None else self.states

    @property
    def layer_shares(self) -> NDArray[np.float64]:
        """Share of each kind of layer, shape (k,)."""
        return np.asarray(np.bincount(self.kinds, weights=self.proportions), dtype=np.float64)

    @property
    def at_random(self) -> bool:
        """Whether what follows never depends on what was before (R0)."""
        return bool(np.allclose(self.probabilities, self.proportions, rtol=0, atol=1e-14))


def _checked_shares(proportions: Sequence[float] | NDArray[np.float64]) -> NDArray[np.float64]:
    shares = np.asarray(proportions, dtype=float)
    if shares.ndim != 1 or shares.size < 1 or not np.all(shares >= 0) or abs(shares.sum() - 1) > 1e-9:
        raise StructureError(f"shares of layers {list(np.round(shares, 4))}", fix="give shares from 0 to 1 that sum to 1")
    return shares


def random_junctions(proportions: Sequence[float] | NDArray[np.float64]) -> Junctions:
    """R0: what follows does not depend on what was before.

    Parameters
    ----------
    proportions : sequence of float, length k
        Share of each kind, sum 1.

    Raises
    ------
    StructureError
        If the shares are negative or do not sum to 1.
    """
    shares = _checked_shares(proportions)
    return Junctions(shares, np.tile(shares, (shares.size, 1)))


def two_kind_junctions(first_fraction: float, reichweite: int, pair_probability: float | None = None) -> Junctions:
    """Two kinds of layers, random (R0) or with a memory of 1 to 3 layers.

    Parameters
    ----------
    first_fraction : float
        Share of the first kind, 0 to 1.
    reichweite : int
        0 to 3. From 1 on, layers of the minority are as evenly apart as that memory can make them (maximum order): with 1
        they are never next to each other, with 2 and 3 two and three others lie between them where there are enough.
    pair_probability : float, optional
        R1 only, in place of maximum order: probability that a layer of the minority is followed by another one. Its own
        share gives R0 again, more gives segregation.

    Raises
    ------
    StructureError
        For another Reichweite, a share outside 0 to 1, or a pair probability that such shares do not allow.

    References
    ----------
    Reynolds (1980) in Brindley & Brown, Crystal Structures of Clay Minerals, ch. 4; Drits & Tchoubar (1990) X-ray
    Diffraction by Disordered Lamellar Structures (both from memory).
    """
    if not 0 <= first_fraction <= 1:
        raise StructureError(f"share of layers {first_fraction:g}", fix="give a share from 0 to 1")
    shares = np.array([first_fraction, 1 - first_fraction])
    if pair_probability is None:
        return ordered_junctions(shares, reichweite)
    if reichweite != 1 or not 0 <= pair_probability <= 1:
        raise StructureError(f"pair probability {pair_probability:g}", fix="give one from 0 to 1, with Reichweite 1")
    if first_fraction in (0.0, 1.0):
        return random_junctions(shares)
    minority = int(first_fraction >= 0.5)
    back = shares[minority] * (1 - pair_probability) / shares[1 - minority]
    matrix = np.empty((2, 2))
    matrix[minority, minority], matrix[minority, 1 - minority] = pair_probability, 1 - pair_probability
    matrix[1 - minority, minority], matrix[1 - minority, 1 - minority] = back, 1 - back
    if pair_probability == 1:
        raise StructureError("pair probability 1", why="the two kinds would never meet", fix="use two separate phases")
    return Junctions(shares, matrix)


def ordered_junctions(proportions: Sequence[float] | NDArray[np.float64], reichweite: int) -> Junctions:
    """The first kind ordered against all others together; which of the others stands in a place is chance.

    Parameters
    ----------
    proportions : sequence of float, length k
        Share of each kind, sum 1; two or three kinds are usual.
    reichweite : int
        0 (random) to 3. Layers of the rarer side (the first kind, or the others together) are as evenly apart as a memory of
        that many layers can make them: with g layers of the other side between two of them on average, at least `reichweite`
        and then by chance when g is larger, otherwise always g rounded down or up.

    Returns
    -------
    Junctions
        States tell how many layers of the commoner side came since the last one of the rarer side.

    Raises
    ------
    StructureError
        For shares or a Reichweite out of range.

    References
    ----------
    As `two_kind_junctions`; with one kind on either side this is the maximum possible order of the literature.
    """
    shares = _checked_shares(proportions)
    if not 0 <= reichweite <= _MAX_REICHWEITE or reichweite != int(reichweite):
        raise StructureError(f"Reichweite {reichweite}", fix="use 0, 1, 2 or 3")
    if reichweite == 0 or shares.size == 1 or shares[0] in (0.0, 1.0):
        return random_junctions(shares)
    first, others = np.array([0]), np.arange(1, shares.size)
    rare, common = (first, others) if shares[0] < 0.5 else (others, first)
    share = float(shares[rare].sum())
    leave = _leaving((1 - share) / share, reichweite)
    # state n: n layers of the common side since the last rare one, the last state meaning that many or more
    length = leave.size
    chain = np.zeros((length, length))
    for n, probability in enumerate(leave):
        chain[n, 0] += probability
        chain[n, min(n + 1, length - 1)] += 1 - probability
    return _split(chain, [rare if n == 0 else common for n in range(length)], shares)


def _leaving(gap: float, reichweite: int) -> NDArray[np.float64]:
    """Probability that a rare layer comes next after 0, 1, 2 ... common ones, for a mean number `gap` >= 1 of these."""
    if gap >= reichweite:
        return np.array([0.0] * reichweite + [1.0 / (gap - reichweite + 1)])
    whole = int(np.floor(gap))
    return np.array([0.0] * whole + [whole + 1 - gap, 1.0])


def _split(chain: NDArray[np.float64], members: list[NDArray[np.int64]], shares: NDArray[np.float64]) -> Junctions:
    """Give every state of a chain one copy per kind of layer that may stand in it, chosen at random."""
    weights = [shares[kinds] / shares[kinds].sum() for kinds in members]
    owner = np.repeat(np.arange(len(members)), [kinds.size for kinds in members])
    choice = np.concatenate(weights)
    probabilities = chain[np.ix_(owner, owner)] * choice
    kept = np.concatenate(members)
    proportions = _stationary(chain)[owner] * choice
    used = np.flatnonzero(proportions > 0)
    used = used[np.argsort(kept[used], kind="stable")]  # kind by kind: with a memory of one layer, states are kinds
    return Junctions(proportions[used], probabilities[np.ix_(used, used)], kept[used])


def _stationary(chain: NDArray[np.float64]) -> NDArray[np.float64]:
    """Shares of states that a chain keeps."""
    size = chain.shape[0]
    system = np.vstack([chain.T - np.eye(size), np.ones(size)])
    solution, _, rank, _ = np.linalg.lstsq(system, np.concatenate([np.zeros(size), [1.0]]), rcond=None)
    if rank < size:
        raise StructureError("junction probabilities", why="some kinds of layers never meet", fix="use separate phases")
    clean = np.where(np.abs(solution) < 1e-14, 0.0, solution)
    return np.asarray(clean / clean.sum())


def markov_junctions(probabilities: NDArray[np.float64]) -> Junctions:
    """Any junction probabilities, with a memory of one to three layers.

    Parameters
    ----------
    probabilities : ndarray, shape (k,) * (R + 1)
        Element [a, ..., y, z] is the probability that kind z follows the R layers a ... y (oldest first); R is 1, 2 or 3, and
        the last axis sums to 1. The shares of the kinds follow from it.

    Returns
    -------
    Junctions
        States are the sequences of R layers that occur.

    Raises
    ------
    StructureError
        If the array is no such table, or some kinds never meet.

    References
    ----------
    Kakinoki & Komura (1952) J. Phys. Soc. Japan 7, 30-35; Drits & Tchoubar (1990) (from memory).
    """
    table = np.asarray(probabilities, dtype=float)
    memory = table.ndim - 1
    if not 1 <= memory <= _MAX_REICHWEITE or len(set(table.shape)) != 1:
        raise StructureError(f"junction table of shape {table.shape}", fix="give k x k, k x k x k or k x k x k x k")
    if not np.all(table >= 0) or not np.allclose(table.sum(axis=-1), 1, atol=1e-9):
        raise StructureError("junction table", why="not probabilities", fix="let the last axis sum to 1, without negatives")
    kinds = table.shape[0]
    sequences = list(product(range(kinds), repeat=memory))
    place = {sequence: i for i, sequence in enumerate(sequences)}
    chain = np.zeros((len(sequences), len(sequences)))
    for sequence in sequences:
        for following in range(kinds):
            chain[place[sequence], place[(*sequence[1:], following)]] += table[(*sequence, following)]
    proportions = _stationary(chain)
    used = proportions > 0
    last = np.array([sequence[-1] for sequence in sequences])
    return Junctions(proportions[used], chain[np.ix_(used, used)], last[used])
