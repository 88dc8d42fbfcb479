"""The compiled search for cast shadow. Arrays only."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["shadowed"]

_TINY = 1e-9


@njit(cache=True, nogil=True, error_model="numpy")
def shadowed(reach, ceiling, step_row, step_column, overhead):  # type: ignore[no-untyped-def]
    """Which pixels the terrain keeps from a far sun.

    All points of one ray toward the sun are equally far from the axis that runs through the body's centre along the
    sun. So a point lies in shadow where any terrain further toward the sun, along the ray's path over the ground, lies
    further from that axis than it does. On a sphere that path is the great circle to the subsolar point, which is
    followed by always heading for the sun.

    Parameters
    ----------
    reach : ndarray, shape (y, x)
        Distance of the terrain from the axis [m]; NaN is missing and casts no shadow.
    ceiling : ndarray, shape (y, x)
        What the highest terrain would have there [m]; where it is below a ray, the ray has escaped.
    step_row, step_column : ndarray, shape (y, x)
        Unit vector toward the sun over the ground, in rows and columns.
    overhead : ndarray of bool, shape (y, x)
        Where the sun is in the zenith, so that nothing can stand before it.

    Returns
    -------
    ndarray of bool, shape (y, x)
    """
    rows, columns = reach.shape
    result = np.zeros((rows, columns), dtype=np.bool_)
    longest = 4 * (rows + columns)
    for row in range(rows):
        for column in range(columns):
            own = reach[row, column]
            if np.isnan(own) or overhead[row, column]:
                continue
            # rounding of positions on a sphere of thousands of kilometres must not shade a plane
            limit = own + 1e-9 * abs(own) + 1e-6
            y, x = float(row), float(column)
            for _ in range(longest):
                near_row, near_column = int(y + 0.5), int(x + 0.5)
                dy, dx = step_row[near_row, near_column], step_column[near_row, near_column]
                # to the next line between rows or columns of the grid, so that no crest of one pixel is stepped over
                step = min(_to_next_line(y, dy), _to_next_line(x, dx))
                y, x = _snapped(y + step * dy), _snapped(x + step * dx)
                if not (0 <= y <= rows - 1 and 0 <= x <= columns - 1):
                    break
                r, c = min(int(y), rows - 2), min(int(x), columns - 2)
                v, u = y - r, x - c
                here = (1 - v) * ((1 - u) * reach[r, c] + u * reach[r, c + 1]) + v * (
                    (1 - u) * reach[r + 1, c] + u * reach[r + 1, c + 1]
                )
                if here > limit:
                    result[row, column] = True
                    break
                if ceiling[r, c] < own and ceiling[r + 1, c + 1] < own:
                    break
                if overhead[r, c]:
                    break
    return result


@njit(cache=True, nogil=True, error_model="numpy")
def _to_next_line(position, speed):  # type: ignore[no-untyped-def]
    if speed > _TINY:
        return (np.floor(position) + 1 - position) / speed
    if speed < -_TINY:
        return (np.ceil(position) - 1 - position) / speed
    return np.inf


@njit(cache=True, nogil=True, error_model="numpy")
def _snapped(position):  # type: ignore[no-untyped-def]
    whole = np.round(position)
    return whole if abs(position - whole) < 1e-7 else position
