"""Boundaries of the sequential test by the definition of Gandy 2009, with exact fractions.  May not import tfstats."""

from fractions import Fraction


def boundaries(alpha, risk, most):
    """(n, low, high) after every draw; low and high are the counts at which the walk stops."""
    alive = {0: Fraction(1)}
    hit_low = hit_high = Fraction(0)
    for n in range(1, most + 1):
        moved = {}
        for count, weight in alive.items():
            moved[count] = moved.get(count, 0) + weight * (1 - alpha)
            moved[count + 1] = moved.get(count + 1, 0) + weight * alpha
        spent = risk * Fraction(n, 1000 + n)
        low, high = min(moved) - 1, max(moved) + 1
        total = Fraction(0)
        for count in sorted(moved):
            total += moved[count]
            if hit_low + total > spent:
                break
            low = count
        total = Fraction(0)
        for count in sorted(moved, reverse=True):
            total += moved[count]
            if hit_high + total > spent:
                break
            high = count
        hit_low += sum(weight for count, weight in moved.items() if count <= low)
        hit_high += sum(weight for count, weight in moved.items() if count >= high)
        alive = {count: weight for count, weight in moved.items() if low < count < high}
        yield n, low, high
