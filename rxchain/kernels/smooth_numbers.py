"""Transform lengths that a mixed-radix FFT does fast."""

from __future__ import annotations


def is_smooth(n: int, largest_prime: int = 7) -> bool:
    """Whether ``n`` has no prime factor over ``largest_prime``.

    >>> [n for n in (96, 97, 98, 121) if is_smooth(n)]
    [96, 98]
    """
    for prime in (2, 3, 5, 7, 11, 13):
        if prime > largest_prime:
            break
        while n % prime == 0:
            n //= prime
    return n == 1


def next_smooth(n: int, multiple_of: int = 1) -> int:
    """The least 7-smooth length from ``n`` up that is a multiple of ``multiple_of`` (itself 7-smooth).

    >>> next_smooth(97), next_smooth(801, multiple_of=4)
    (98, 840)
    """
    length = -(-n // multiple_of) * multiple_of
    while not is_smooth(length):
        length += multiple_of
    return length
