"""Orientable sequences: the order of the bars of a ruler.

A binary sequence is orientable of order n when every window of n bits occurs once and never reads the same
as any window backwards, so that n neighbouring bars tell where they lie and which way they are read.
Source: Dai, Martin, Robshaw and Wild, "Orientable sequences", in Cryptography and Coding III (1993).
"""

from __future__ import annotations

from functools import cache
from random import Random

ORDER = 9
LONGEST_RUN = 3


def is_orientable(bits: tuple[int, ...], order: int) -> bool:
    """Whether every window of ``order`` bits is unique, read either way."""
    seen: set[tuple[int, ...]] = set()
    for start in range(len(bits) - order + 1):
        window = bits[start : start + order]
        if window in seen or window[::-1] in seen or window == window[::-1]:
            return False
        seen.add(window)
    return True


def most_windows(order: int) -> int:
    """Windows that an orientable sequence can have at most.

    Of all words of n bits, those that read the same backwards cannot occur, and of the others one of each
    pair: 2^(n-1) - 2^floor((n-1)/2). Source: Gabric and Sawada, on orientable sequences.
    """
    return int(2 ** (order - 1) - 2 ** ((order - 1) // 2))


@cache
def orientable_sequence(length: int, order: int = ORDER, seed: int = 1) -> tuple[int, ...]:
    """Find an orientable sequence with no run longer than three.

    Parameters
    ----------
    length : int
        Number of bits.
    order : int
        Window length n, 5 or more.
    seed : int
        Start of the search; the same seed gives the same sequence.

    Returns
    -------
    tuple of int
        ``length`` bits, 0 or 1.

    Raises
    ------
    ValueError
        If there is no such sequence, or none was found.
    """
    if order < 5 or length - order + 1 > most_windows(order):
        raise ValueError(f"there is no orientable sequence of {length} bits and order {order}")
    for attempt in range(1000):
        found = _search(length, order, Random(1000 * seed + attempt))
        if found is not None:
            return found
    raise ValueError(f"no orientable sequence of {length} bits and order {order} was found")


def _search(length: int, order: int, random: Random, budget: int = 20_000) -> tuple[int, ...] | None:
    """Depth-first search with backtracking, given up after ``budget`` trials."""
    bits = [0, 1, 1, 0][: min(4, length)]
    used: set[tuple[int, ...]] = set()
    choices: list[list[int]] = []

    def options() -> list[int]:
        pair = [0, 1]
        random.shuffle(pair)
        return [bit for bit in pair if _fits(bits, bit, order, used)]

    choices.append(options())
    for _ in range(budget):
        if len(bits) == length:
            return tuple(bits)
        if choices[-1]:
            bits.append(choices[-1].pop())
            if len(bits) >= order:
                used.add(tuple(bits[-order:]))
            choices.append(options())
            continue
        choices.pop()
        if not choices:
            return None
        used.discard(tuple(bits[-order:]))
        bits.pop()
    return None


def _fits(bits: list[int], bit: int, order: int, used: set[tuple[int, ...]]) -> bool:
    if bits[-LONGEST_RUN:] == [bit] * LONGEST_RUN:
        return False
    if len(bits) + 1 < order:
        return True
    window = (*bits[len(bits) - order + 1 :], bit)
    backwards = window[::-1]
    return window not in used and backwards not in used and window != backwards
