"""How a block turns the directions of a subspace that is full: in one pass over the block."""

from __future__ import annotations

import math
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from streambasis.measuring import Block
from streambasis.turning import Stack, Turn
from streambasis.weighing import Weights

NEWCOMERS: Final = 4
"""Directions beside those held that a block is looked at along: where new ones come in."""
QUIET: Final = 0.1
"""Largest energy of a block outside the directions, over the least energy of a direction reported,
at which the block is folded in one pass: what that leaves out of a turn of a direction is about
this part of the turn. With it the angle to the true subspace was measured within 0.4 % of that of
exact folds, with a half within 2 %."""
LEAST_ENERGY: Final = {32: 1e-7, 64: 1e-11}
"""Least energy held over the largest, by the bits of a number. Energies are solved with scaled to a
unit diagonal, which does not mind their range (J. Demmel and K. Veselić (1992), SIAM J. Matrix
Analysis and Applications 13); only the last step leaves an epsilon of the largest energy in all of
them, 1e-5 of the least. What is reported lies above that by far, and noise is judged to 1e-2."""
LEAST_PIVOT: Final = 1e-3
"""Least pivot of the energies scaled to a unit diagonal, so that solving with them loses three
digits at most."""


def one_pass_turn(
    stack: Stack,
    before: NDArray[np.float64],
    block: Block,
    weights: Weights,
    floors: NDArray[np.float64],
    reported: int,
) -> Turn | None:
    """Return a turn that takes one product with the block, or None where that is not sound.

    Parameters
    ----------
    stack : Stack
        With room for k + 2·NEWCOMERS rows below the k directions.
    before : ndarray of float64, shape (k,)
        Singular values held, as the block finds them.
    block : Block
    weights : Weights
    floors : ndarray of float64, shape (m,)
        Norm of a sample's part outside the directions up to which it is rounding.
    reported : int
        How many of the directions are asked for.

    Notes
    -----
    The Nyström approximation of the scatter M from the rows T, which are the directions and a few
    along what the least explained samples leave: M·Tᴴ·(T·M·Tᴴ)⁻¹·T·M, the largest matrix below M
    that acts on T as M does. With A = T·M·Tᴴ, B the weighted block, C its coordinates along T and
    D = Cᴴ(B - C·T) it is Xᴴ·A·X for X = T + A⁻¹·D. The Gram matrix of X is I + A⁻¹·DDᴴ·A⁻¹ = HHᴴ,
    and the eigenvectors of HᴴAH finish the turn.

    What it leaves out, E, has E·T = 0 and is below the scatter of the block outside T. A direction
    of energy λ turns by about A⁻¹·D where it ought to turn by (A - E)⁻¹·D: wrong by |E|/λ of the
    turn. |E| is estimated by what the least explained samples show; None comes back where it is
    above QUIET·λ, or where the energies are too far apart.

    4n·k·m flops for the block, and 10n·k² for the turn.

    References
    ----------
    J. A. Tropp, A. Yurtsever, M. Udell and V. Cevher (2017), Fixed-rank approximation of a
    positive-semidefinite matrix from streaming data, Advances in Neural Information Processing
    Systems 30.
    """
    held = stack.held
    least = LEAST_ENERGY[np.finfo(stack.rows.dtype).bits]
    if before[-1] ** 2 <= least * before[0] ** 2:
        return None
    wide = np.result_type(block.coordinates.dtype, np.float64)
    width = _append_newcomers(stack, block, weights, floors)
    top = held + width
    rows, products = stack.rows[:top], stack.rows[top : 2 * top]
    along = np.empty((len(block.coordinates), top), wide)
    along[:, :held] = block.coordinates
    along[:, held:] = block.deviations @ rows[held:].conj().T
    weights.apply(along)
    gram = along.conj().T @ along
    energies = gram.copy()
    energies.reshape(-1)[: held * (top + 1) : top + 1] += before * before
    weakest = max(reported - 1, 0)
    loudest = np.abs(energies[held:, held:]).sum(axis=1).max(initial=0.0)
    if loudest > QUIET * energies[weakest, weakest].real:
        return None
    inverse = _inverse(energies)
    if inverse is None:
        return None
    typed = weights.apply_adjoint(along).astype(rows.dtype, copy=False)
    np.matmul(typed.conj().T, block.deviations, out=products)
    products -= gram.astype(rows.dtype, copy=False) @ rows
    turned = (products @ products.conj().T).astype(wide, copy=False)
    step = inverse @ turned
    try:
        lower = np.linalg.cholesky(np.eye(top) + step @ inverse)
        found, columns = np.linalg.eigh(lower.conj().T @ energies @ lower)
        combined = np.linalg.inv(lower)
    except np.linalg.LinAlgError:
        return None
    if not math.isfinite(found.sum()):
        return None
    # NumPy has no fast product of an array with a negative stride
    combined = np.ascontiguousarray(columns.T[::-1]).conj() @ combined
    summed = None
    if weights.shrink:
        summed = weights.sum(block.deviations) - weights.sum(block.coordinates) @ rows[:held]
    missed = weights.scatter(block.outside, summed)
    missed -= float(energies.diagonal()[held:].real.sum() + np.trace(step).real)
    return Turn(
        np.sqrt(np.maximum(found[::-1], 0.0)),
        np.concatenate([combined, combined @ inverse], axis=1),
        missed,
    )


def _append_newcomers(
    stack: Stack, block: Block, weights: Weights, floors: NDArray[np.float64]
) -> int:
    """Append directions along what the least explained samples leave; return how many."""
    count = min(NEWCOMERS, len(floors), stack.rows.shape[1] - stack.held)
    chosen = np.argsort(weights.squares * block.outside, kind="stable")[-count:]
    directions = stack.rows[: stack.held]
    residuals = block.deviations[chosen] - block.coordinates[chosen] @ directions
    _, factor = stack.orthonormalize(residuals, floors[chosen])
    return int(factor.shape[1])


def _inverse(energies: NDArray[Any]) -> NDArray[Any] | None:
    """Return the inverse of a positive definite matrix, or None where it would lose digits."""
    scale = 1.0 / np.sqrt(energies.diagonal().real)
    between = np.outer(scale, scale)
    try:
        lower = np.linalg.cholesky(energies * between)
    except np.linalg.LinAlgError:
        return None
    if not lower.diagonal().real.min() > LEAST_PIVOT:
        return None
    half = np.linalg.inv(lower)
    inverse: NDArray[Any] = (half.conj().T @ half) * between
    return inverse
