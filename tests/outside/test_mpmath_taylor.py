"""Outside propagator 2: mpmath's Taylor solver at 40 digits; its file must pass at 1e-13.

Areal polar coordinates in chart time, from the metric ``-f dt^2 + dr^2/f + r^2 dphi^2``::

    r''   = r f phi'^2 - f/r^2 + 3 r'^2/(f r^2)
    phi'' = -2 r' phi' (1/r - 1/(r^2 f))
"""

from __future__ import annotations

import mpmath
import numpy as np

from truefall.validate.check import check_file


def right_hand_side(_t, y):
    r, _, dr, dphi = y
    f = 1 - 2 / r
    return [
        dr,
        dphi,
        r * f * dphi**2 - f / r**2 + 3 * dr**2 / (f * r**2),
        -2 * dr * dphi * (1 / r - 1 / (r**2 * f)),
    ]


def test_forty_digits_pass_at_1e_13(tmp_path):
    """Rounded to float64 in the end, so the error left is half a unit in the last place."""
    with mpmath.workdps(40):
        start = [mpmath.mpf(8), mpmath.mpf(0), mpmath.mpf(-1) / 8, mpmath.mpf(3) / 64]
        solution = mpmath.odefun(right_hand_side, 0, start)
        rows = []
        for time in range(0, 25, 4):
            r, phi, dr, dphi = solution(time)
            c, s = mpmath.cos(phi), mpmath.sin(phi)
            rows.append([time, r * c, r * s, 0, dr * c - r * dphi * s, dr * s + r * dphi * c, 0])
    table = np.array([[float(v) for v in row] for row in rows])
    path = tmp_path / "taylor.npz"
    words = {"system": "geometric", "particle": "massive", "chart": "areal", "clock": "coordinate"}
    lines = ["gm = 1.0", *(f'{k} = "{v}"' for k, v in words.items())]
    np.savez(
        path, time=table[:, 0], position=table[:, 1:4], velocity=table[:, 4:7],
        metadata=np.array("\n".join(lines)),
    )  # fmt: skip
    (result,) = check_file(path, budget={"position": 1e-13, "velocity": 1e-13})

    assert result.verdict == "pass"
    assert result.comparison.distance.max() < 2e-15
    assert result.start_from == "first row"
