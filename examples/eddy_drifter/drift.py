#!/usr/bin/env python3
"""A program that stays: drift in an eddy, one request and one answer a line (invented).

A request holds, separated by blanks, m d P J T, then m times, d state components, P parameters and
T rows of t xi_1 ... xi_J; the answer is "ok" and m x d numbers, or "error" and why. The water turns
around the centre with speed U (r/R) exp((1 - r^2/R^2) / 2), greatest at r = R.
"""

import math
import sys

SPEED = 32.0  # km/day
RADIUS = 30.0  # km


def flow(x, y):
    """Velocity of the water (km/day) at x, y (km)."""
    rate = SPEED / RADIUS * math.exp(0.5 - 0.5 * (x * x + y * y) / RADIUS**2)
    return -rate * y, rate * x


def drift(times, x, y, table):
    """States at the times; the noise is linear between rows of (t, east, north)."""
    found, left = [], list(times)
    for k, (t, a, b) in enumerate(table):
        if left and t > left[0] - 1e-9:
            found += [x, y]
            left.pop(0)
        if k + 1 == len(table):
            break
        then, c, d = table[k + 1]
        h = then - t
        u1, v1 = flow(x, y)
        u1, v1 = u1 + a, v1 + b
        u2, v2 = flow(x + 0.5 * h * u1, y + 0.5 * h * v1)
        u2, v2 = u2 + 0.5 * (a + c), v2 + 0.5 * (b + d)
        u3, v3 = flow(x + 0.5 * h * u2, y + 0.5 * h * v2)
        u3, v3 = u3 + 0.5 * (a + c), v3 + 0.5 * (b + d)
        u4, v4 = flow(x + h * u3, y + h * v3)
        x += h / 6.0 * (u1 + 2.0 * (u2 + u3) + u4 + c)
        y += h / 6.0 * (v1 + 2.0 * (v2 + v3) + v4 + d)
    if left:
        raise ValueError(f"there is no row of noise at t = {left[0]:g}")
    return found


for line in sys.stdin:
    words = line.split()
    m, d, p, j, rows = map(int, words[:5])
    numbers = [float(word) for word in words[5:]]
    first, width = m + d + p, 1 + j
    table = [numbers[k : k + width] for k in range(first, first + rows * width, width)]
    try:
        states = drift(numbers[:m], *numbers[m : m + d], table)
        print("ok", *map(repr, states), flush=True)
    except (ArithmeticError, ValueError) as error:
        print("error", error, flush=True)
