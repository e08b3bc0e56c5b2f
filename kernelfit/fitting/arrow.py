"""Linear algebra of an information matrix with an arrow shape: each unit's own block, then the shared parameters.

Eliminating the own blocks first keeps the cost linear in the number of units (docs/model.md section 4).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg

from kernelfit._typing import BoolArray, FloatArray

LEAST_OWN = 1e-13  # smallest eigenvalue of an own block with a unit diagonal: below it an inverse is rounding


SMALLEST_EIGENVALUE = 1e-9  # of information scaled to a unit diagonal: below this parameters cannot be told apart


class SingularOwnBlock(np.linalg.LinAlgError):
    """The own parameters of one unit cannot be told apart. `place` is its index among the targets."""

    def __init__(self, place: int) -> None:
        super().__init__(f"own block {place} is singular")
        self.place = place


@dataclass(frozen=True, eq=False)
class Arrow:
    """Information matrix in blocks: own (n, P, P), cross (n, P, Q), shared (Q, Q)."""

    own: FloatArray
    cross: FloatArray
    shared: FloatArray

    def damped(self, factor: float) -> Arrow:
        """Every diagonal element times (1 + factor) (Marquardt 1963)."""
        own, shared = self.own.copy(), self.shared.copy()
        p, q = np.arange(own.shape[1]), np.arange(shared.shape[0])
        own[:, p, p] *= 1.0 + factor
        shared[q, q] *= 1.0 + factor
        return Arrow(own, self.cross, shared)

    def only(self, free: BoolArray) -> Arrow:
        """The same with some shared parameters taken out."""
        return Arrow(self.own, self.cross[..., free], self.shared[np.ix_(free, free)])


@dataclass(frozen=True, eq=False)
class Elimination:
    """An arrow matrix after eliminating the own blocks.

    own_inverse (n, P, P); reduced (n, P, Q) own_inverse @ cross; schur (Q, Q), the information on the shared parameters
    that is left once the own ones are estimated too.
    """

    own_inverse: FloatArray
    reduced: FloatArray
    schur: FloatArray

    def efficient_score(self, score_own: FloatArray, score_shared: FloatArray) -> FloatArray:
        """Shared score less what the own parameters explain of it: (..., n, P) and (..., Q) to (..., Q)."""
        return np.asarray(score_shared - np.einsum("npq,...np->...q", self.reduced, score_own))

    def solve(self, score_own: FloatArray, score_shared: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Solve H x = score: own (n, P) and shared (Q,) parts of x. Raises numpy's LinAlgError where singular."""
        shared = solve_symmetric(self.schur, self.efficient_score(score_own, score_shared))
        own = np.einsum("npk,nk->np", self.own_inverse, score_own) - self.reduced @ shared
        return own, shared


def eliminate(arrow: Arrow) -> Elimination:
    """Eliminate the own blocks. Raises SingularOwnBlock, a LinAlgError of numpy, where one is singular."""
    diagonal = np.diagonal(arrow.own, axis1=1, axis2=2)
    scale = 1.0 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
    scaled = arrow.own * scale[:, :, None] * scale[:, None, :]
    weak = ~(np.linalg.eigvalsh(scaled)[:, 0] > LEAST_OWN) if scaled.size else np.zeros(len(scaled), dtype=bool)
    if weak.any():
        raise SingularOwnBlock(int(np.argmax(weak)))
    own_inverse = np.linalg.inv(scaled) * scale[:, :, None] * scale[:, None, :]
    reduced = own_inverse @ arrow.cross
    schur = arrow.shared - np.einsum("npq,npr->qr", arrow.cross, reduced)
    return Elimination(own_inverse, reduced, 0.5 * (schur + schur.T))


def solve_symmetric(matrix: FloatArray, right: FloatArray) -> FloatArray:
    """Solve a positive definite system after scaling its diagonal to one; numpy's LinAlgError where it is not."""
    if matrix.shape[0] == 0:
        return np.zeros_like(right)
    diagonal = np.diag(matrix)
    if not (diagonal > 0).all():
        raise np.linalg.LinAlgError("a parameter carries no information")
    scale = 1.0 / np.sqrt(diagonal)
    factor = scipy.linalg.cho_factor(matrix * scale[:, None] * scale[None, :])
    return np.asarray((scipy.linalg.cho_solve(factor, (right.T * scale).T).T * scale).T)


def solve_leniently(matrix: FloatArray, right: FloatArray) -> FloatArray:
    """Least-squares solution of a positive semidefinite system after scaling its diagonal to one; any rank will do."""
    diagonal = np.diag(matrix)
    scale = np.where(diagonal > 0, 1.0 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0)), 0.0)
    inverse = np.linalg.pinv(matrix * scale[:, None] * scale[None, :], rcond=1e-10, hermitian=True)
    return np.asarray(scale[:, None] * (inverse @ (scale[:, None] * right)))


@dataclass(frozen=True, eq=False)
class Determined:
    """A positive semidefinite matrix (Q, Q) split into what it determines and what it says nothing about.

    scale (Q,) one over the root of the diagonal, 1 where that is not positive; value (Q,), vector (Q, Q) eigenvalues,
    ascending, and eigenvectors of the matrix scaled to a unit diagonal.
    """

    scale: FloatArray
    value: FloatArray
    vector: FloatArray

    @classmethod
    def of(cls, matrix: FloatArray) -> Determined:
        """Split a matrix."""
        diagonal = np.diag(matrix)
        informed = diagonal > 0
        scale = 1.0 / np.sqrt(np.where(informed, diagonal, 1.0))
        scaled = np.where(informed[:, None] & informed[None, :], matrix * scale[:, None] * scale[None, :], 0.0)
        return cls(scale, *np.linalg.eigh(scaled))

    @property
    def weak(self) -> FloatArray:
        """(W, Q) unit vectors of the scaled matrix along which it says nothing, the weakest first."""
        rows = self.vector[:, ~(self.value > SMALLEST_EIGENVALUE)].T
        largest = np.argmax(np.abs(rows), axis=1) if rows.size else np.zeros(len(rows), dtype=np.int64)
        return np.asarray(rows * np.where(rows[np.arange(len(rows)), largest] < 0, -1.0, 1.0)[:, None])

    def solve(self, right: FloatArray) -> FloatArray:
        """The solution in what is determined, without a part along the weak vectors."""
        kept = self.value > SMALLEST_EIGENVALUE
        part = self.vector[:, kept]
        return np.asarray((((right.T * self.scale) @ part / self.value[kept]) @ part.T * self.scale).T)


def solve_determined(matrix: FloatArray, right: FloatArray) -> FloatArray:
    """`solve_symmetric` where the matrix determines everything, and its solution in what is determined where not."""
    if matrix.shape[0] == 0:
        return np.zeros_like(right)
    split = Determined.of(matrix)
    return split.solve(right) if len(split.weak) else solve_symmetric(matrix, right)
