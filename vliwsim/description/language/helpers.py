"""Integer functions that compiled meanings call because they are too long to write in place."""

from __future__ import annotations


def clmul(a: int, b: int) -> int:
    """Carry-less product of two bit patterns."""
    product = 0
    while b:
        low = b & -b
        product ^= a * low
        b ^= low
    return product ^ (a & 0)  # refuses an undefined a even where b is 0


def rounded(x: int, n: int, mode: str) -> int:
    """x / 2**n as an integer, rounded by ``mode``."""
    if n == 0 or mode == "floor":
        return x >> n
    half = 1 << n - 1
    if mode == "half_up":
        return x + half >> n
    if mode == "ceiling":
        return -(-x >> n)
    if mode == "half_even":
        return x + half - 1 + (x >> n & 1) >> n
    if mode == "half_away":
        return x + half >> n if x >= 0 else -(-x + half >> n)
    return x >> n if x >= 0 else -(-x >> n)
