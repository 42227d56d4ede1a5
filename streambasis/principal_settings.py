"""The settings of a principal basis, checked and completed."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Self

import numpy as np

from streambasis.errors import SettingError, SnapshotError
from streambasis.ranks import rank_by_mdl, rank_by_noise

RULES = {"noise": rank_by_noise, "mdl": rank_by_mdl}

WHOLE = 64
"""Up to this many channels every direction is held: the core is then about as small as a cut one
would be, and nothing is ever cut."""
DEFAULT_MAX_RANK = 64
LEAST_RESERVE = 8
"""Directions held beyond those reported, at least: where the next ones grow until they count. With
8 the angle to the true subspace was measured within 1 % of that of the batch SVD."""
LEAST_BLOCK, LARGEST_BLOCK = 64, 1024
LARGEST_BUFFER = 1 << 21
"""Numbers in the buffer of a block: about as much as the directions and the workspace of a fold
take with many channels. What a fold costs beside its products with the block is the same for
blocks of any size."""


@dataclass(frozen=True, slots=True)
class Settings:
    """What a principal basis was asked to do.

    Attributes
    ----------
    rule : str or int
        ``"noise"``, ``"mdl"`` or a number of directions.
    most : int
        Most directions reported.
    limit : int
        Most directions held.
    forget : float
        Forgetting factor.
    block : int
        Most samples folded at a time.
    growing : bool
        Whether blocks start small and grow up to that.
    """

    rule: str | int
    most: int
    limit: int
    forget: float
    block: int
    growing: bool

    @classmethod
    def checked(
        cls, count: int, rank: Any, max_rank: Any, forget: Any, half_life: Any, block: Any
    ) -> Self:
        """Return the settings for ``count`` channels, or raise SettingError."""
        rule, most = _checked_rank(rank, max_rank, count)
        factor = _checked_forgetting(forget, half_life)
        limit = most + max(LEAST_RESERVE, most // 4)
        limit = count if count <= WHOLE else min(count, limit)
        size = _default_block(count, factor) if block is None else _checked_block(block)
        return cls(rule, most, limit, factor, size, block is None)

    @classmethod
    def kept(cls, facts: dict[str, Any], count: int) -> Self:
        """Return the settings that a state names, whatever the defaults are today."""
        given = cls.checked(
            count, facts["rank"], facts["max_rank"], facts["forget"], None, facts["block"]
        )
        # states were once written without it, under the rule that still holds
        limit = facts.get("limit", given.limit)
        if not isinstance(limit, int) or not given.most <= limit <= count:
            raise SnapshotError(f"limit={limit!r}: from max_rank={given.most} to {count} channels")
        return replace(given, limit=limit, growing=bool(facts["growing"]))


def _checked_rank(rank: Any, max_rank: Any, count: int) -> tuple[str | int, int]:
    """Return the rank rule and the most directions reported."""
    fixed = isinstance(rank, int | np.integer) and not isinstance(rank, bool)
    if not fixed and rank not in RULES:
        raise SettingError(f'rank={rank!r}: "noise", "mdl" or a whole number')
    if fixed and not 1 <= rank <= count:
        raise SettingError(f"rank={rank}: from 1 to the number of channels ({count})")
    if max_rank is None:
        max_rank = rank if fixed else min(DEFAULT_MAX_RANK, count)
    elif not isinstance(max_rank, int | np.integer) or not 1 <= max_rank <= count:
        raise SettingError(f"max_rank={max_rank!r}: from 1 to the number of channels ({count})")
    if fixed and rank > max_rank:
        raise SettingError(f"rank={rank} is above max_rank={max_rank}")
    return (int(rank) if fixed else str(rank)), int(max_rank)


def _checked_forgetting(forget: float, half_life: float | None) -> float:
    """Return the forgetting factor."""
    if half_life is not None:
        if forget != 1.0:
            raise SettingError(f"forget={forget} and half_life={half_life}: give one of the two")
        if not half_life > 0.0:
            raise SettingError(f"half_life={half_life}: a number of samples above 0")
        return float(0.5 ** (1.0 / half_life))
    if not 0.0 < forget <= 1.0:
        raise SettingError(f"forget={forget}: a factor above 0 and at most 1")
    return float(forget)


def _checked_block(block: Any) -> int:
    """Return the number of samples folded at a time."""
    if not isinstance(block, int | np.integer) or isinstance(block, bool) or block < 1:
        raise SettingError(f"block={block!r}: a whole number of samples, at least 1")
    return int(block)


def _default_block(count: int, forget: float) -> int:
    """Return the block that costs least per sample, as far as the memory allows."""
    block = max(LEAST_BLOCK, min(LARGEST_BLOCK, LARGEST_BUFFER // count))
    if forget < 1.0:
        # a basis that lags by more than an eighth of its memory forgets out of step
        block = min(block, max(1, int(0.125 / (1.0 - forget))))
    return block
