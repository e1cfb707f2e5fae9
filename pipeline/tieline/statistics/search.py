"""Zeros and maxima of many functions of one variable at once.

- `root(function, a, b, f_a, f_b, tolerance) -> places`
- `summit(function, left, right) -> (places, heights)`

A function is called with places, shape (K,), and the numbers of the K functions that these belong to, for
those already settled are not asked again.
"""

from collections.abc import Callable

import numpy as np

from tieline.statistics.groups import FloatArray, IntArray, divide

Function = Callable[[FloatArray, IntArray], FloatArray]

_CLOSER_PLACES = 9
_MOST_STEPS = 60
_SUMMIT_TOLERANCE = 1e-5


def root(
    function: Function, a: FloatArray, b: FloatArray, f_a: FloatArray, f_b: FloatArray, tolerance: float
) -> FloatArray:
    """Where each function passes zero between a and b, shape (K,); the end nearer zero where it does not.

    Ridders (1979, IEEE Trans. Circuits Syst. 26:979), for simple zeros. f_a, f_b: the functions at the ends.
    tolerance: length of the last step, relative to the place.
    """
    found = np.where(np.abs(f_a) < np.abs(f_b), a, b)
    which = np.flatnonzero(f_a * f_b < 0)
    a, b, f_a, f_b = a[which], b[which], f_a[which], f_b[which]
    for _ in range(_MOST_STEPS):
        if not len(which):
            break
        middle = 0.5 * (a + b)
        f_middle = function(middle, which)
        x = middle + (middle - a) * np.sign(f_a - f_b) * f_middle / np.sqrt(f_middle**2 - f_a * f_b)
        f = function(x, which)
        # The new bracket: middle and x, or a and x, or x and b.
        at_middle, at_a = f_middle * f < 0, f_a * f < 0
        b, f_b = np.where(at_middle | at_a, x, b), np.where(at_middle | at_a, f, f_b)
        a = np.where(at_middle, middle, np.where(at_a, a, x))
        f_a = np.where(at_middle, f_middle, np.where(at_a, f_a, f))
        going = (np.abs(x - found[which]) > tolerance * np.abs(x)) & (f != 0)
        found[which] = x
        which, a, b, f_a, f_b = (values[going] for values in (which, a, b, f_a, f_b))
    return found


def summit(function: Function, left: FloatArray, right: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Place and height of the maximum of each function between left and right, shape (K,) each.

    Nine places are looked at, for a function may have more than one maximum; from the highest, parabolas through
    three places, or the middle of the wider side where one leads outside.
    """
    every = np.arange(len(left))
    places = np.linspace(left, right, _CLOSER_PLACES, axis=1)
    heights = np.stack([function(places[:, column], every) for column in range(_CLOSER_PLACES)], axis=1)
    best = heights.argmax(axis=1)
    around = [np.clip(best + step, 0, _CLOSER_PLACES - 1) for step in (-1, 0, 1)]
    left, top, right = (places[every, place] for place in around)
    f_left, f_top, f_right = (heights[every, place] for place in around)
    found, height = top.copy(), f_top.copy()
    tolerance = _SUMMIT_TOLERANCE * (right - left)
    which = np.flatnonzero(tolerance > 0)
    points = [values[which] for values in (left, top, right, f_left, f_top, f_right, tolerance)]
    for _ in range(_MOST_STEPS):
        if not len(which):
            break
        left, top, right, f_left, f_top, f_right, tolerance = points
        x = _next_place(*points)
        f = function(x, which)
        higher = f > f_top
        # The lower of the two places becomes the end of the bracket on its side.
        lower, f_lower = np.where(higher, top, x), np.where(higher, f_top, f)
        is_left = lower < np.where(higher, x, top)
        left, f_left = np.where(is_left, lower, left), np.where(is_left, f_lower, f_left)
        right, f_right = np.where(is_left, right, lower), np.where(is_left, f_right, f_lower)
        top, f_top = np.where(higher, x, top), np.where(higher, f, f_top)
        found[which], height[which] = top, f_top
        going = right - left > 2.0 * tolerance
        points = [values[going] for values in (left, top, right, f_left, f_top, f_right, tolerance)]
        which = which[going]
    return found, height


def _next_place(
    left: FloatArray,
    top: FloatArray,
    right: FloatArray,
    f_left: FloatArray,
    f_top: FloatArray,
    f_right: FloatArray,
    tolerance: FloatArray,
) -> FloatArray:
    """The vertex of the parabola through three places, or the middle of the wider side."""
    below, above = top - left, right - top
    rise, fall = (f_top - f_left) * above, (f_top - f_right) * below
    shift = divide(0.5 * (rise * above - fall * below), rise + fall)
    middle = np.where(above > below, 0.5 * (top + right), 0.5 * (left + top))
    inside = (top + shift > left) & (top + shift < right)
    # A place that nearly repeats the top would teach nothing: steps of half the tolerance settle both sides.
    least = np.where(above > below, 0.5, -0.5) * tolerance
    shift = np.where(np.abs(shift) < 0.1 * tolerance, least, shift)
    return np.where(inside, top + shift, middle)
