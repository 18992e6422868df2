"""The orbits of tests/data/second_route.json: starts in every class and chart, exact float64.

Starts of a class are thought out in the areal chart and carried to the others in float64, then
rounded to a few decimals: what is stored is a start of its own.  Degenerate starts (circles,
whirls, critical rays, parabolas) are the ones that float64 represents exactly.
"""

from __future__ import annotations

from math import nextafter, sqrt
from typing import Any

RADIAL = (0.48, 0.6, 0.64)
TANGENTIAL = (0.8, 0.0, -0.6)
CHARTS = (
    "areal",
    "isotropic",
    "harmonic",
    "kerr-schild",
    "painleve-gullstrand",
    "eddington-finkelstein",
)


def _carried(chart: str, r: float, rdot: float, vt: float, particle: str) -> dict[str, Any]:
    """A start near the areal one, in ``chart``: rounded to 6 decimals."""
    f = 1 - 2 / r
    if particle == "light":
        size = 1 / sqrt(rdot**2 / f**2 + vt**2 / f)
        rdot, vt = rdot * size, vt * size
    g = {"kerr-schild": 2 / (r - 2), "painleve-gullstrand": sqrt(2 / r) / f}.get(chart, 0.0)
    if chart == "eddington-finkelstein":
        g = 1 / f
    rate = 1 + g * rdot
    rho, slope = r, 1.0
    if chart == "isotropic":
        rho = (r - 1 + sqrt(r * (r - 2))) / 2
        slope = 1 / (1 - 1 / (4 * rho**2))
    elif chart == "harmonic":
        rho = r - 1
    vn, vs = slope * rdot / rate, vt * rho / r / rate
    position = [round(rho * n, 6) for n in RADIAL]
    velocity = [round(vn * n + vs * e, 6) for n, e in zip(RADIAL, TANGENTIAL, strict=True)]
    if vt == 0:  # exactly radial: velocity along the rounded position
        scale = round(vn / rho, 6)
        position = [round(q * 64) / 64 for q in position]
        velocity = [scale * q for q in (0.0, 0.0, 0.0)] if rdot == 0 else velocity
        if rdot != 0:
            power = round(vn / rho * 1024) / 1024
            velocity = [power * q for q in position]
    return {"chart": chart, "particle": particle, "position": position, "velocity": velocity}


# name, particle, (r, rdot, tangential speed), times; a clock where it is proper time.
CLASSES: list[tuple[str, str, tuple[float, float, float], list[float], str]] = [
    ("bound", "massive", (12.0, 0.02, 0.27), [37.5, 300.0, 1000.0, -150.25], "coordinate"),
    ("bound-proper", "massive", (9.0, -0.03, 0.33), [20.0, 250.0, 800.0, -77.0], "proper"),
    ("near-circular", "massive", (10.0, 0.0, 0.316228), [11.0, 500.0, -60.5], "coordinate"),
    ("plunge", "massive", (8.0, -0.1, 0.2), [3.0, 10.0, 20.0, -15.0], "coordinate"),
    ("plunge-proper", "massive", (7.0, -0.15, 0.15), [1.0, 5.0, 8.0, -4.0], "proper"),
    ("capture", "massive", (30.0, -0.5, 0.05), [10.0, 40.0, 55.0, -200.0], "coordinate"),
    ("flyby", "massive", (60.0, -0.4, 0.09), [50.0, 130.0, 400.0, -300.0], "coordinate"),
    ("near-parabolic", "massive", (40.0, -0.15, 0.15), [60.0, 200.0, 900.0, -300.0], "coordinate"),
    ("radial-in", "massive", (10.0, -0.2, 0.0), [5.0, 12.0, 20.0, -30.0], "coordinate"),
    ("radial-back", "massive", (6.0, 0.15, 0.0), [5.0, 15.0, 25.0, -3.0], "coordinate"),
    ("radial-rest", "massive", (9.0, 0.0, 0.0), [4.0, 20.0, 30.0, -6.0], "coordinate"),
    ("radial-rest-proper", "massive", (9.0, 0.0, 0.0), [4.0, 15.0, 24.0, -6.0], "proper"),
    ("radial-escape", "massive", (20.0, 0.6, 0.0), [10.0, 100.0, 2000.0, -9.0], "coordinate"),
    ("light-flyby", "light", (40.0, -1.0, 0.2), [20.0, 42.0, 150.0, -100.0], "coordinate"),
    ("light-capture", "light", (25.0, -1.0, 0.1), [10.0, 22.0, 26.0, -60.0], "coordinate"),
    ("light-trapped", "light", (2.625, 0.05, 1.0), [1.0, 4.0, 7.0, -1.5], "coordinate"),
    ("light-radial-in", "light", (12.0, -1.0, 0.0), [4.0, 9.0, 12.0, -20.0], "coordinate"),
    ("light-radial-out", "light", (5.0, 1.0, 0.0), [4.0, 90.0, 700.0, -2.0], "coordinate"),
]


# Where an ingoing chart's time ends early (r = 0, or light from infinity in finite time).
EARLY: dict[str, list[float]] = {
    "plunge/kerr-schild": [3.0, 15.0, 28.25, -15.0],
    "plunge/painleve-gullstrand": [3.0, 15.0, 24.5, -15.0],
    "plunge/eddington-finkelstein": [3.0, 10.0, 20.25, -15.0],
    "plunge-proper/kerr-schild": [5.0, 12.0, 14.25, -4.0],
    "plunge-proper/painleve-gullstrand": [5.0, 12.0, 14.25, -4.0],
    "plunge-proper/eddington-finkelstein": [5.0, 12.0, 14.25, -30.0],
    "capture/kerr-schild": [10.0, 40.0, 54.0, -200.0],
    "capture/painleve-gullstrand": [10.0, 30.0, 45.0, -200.0],
    "capture/eddington-finkelstein": [10.0, 20.0, 24.25, -200.0],
    "radial-in/kerr-schild": [5.0, 12.0, 25.0, -30.0],
    "radial-in/eddington-finkelstein": [5.0, 12.0, 15.25, -30.0],
    "radial-rest/eddington-finkelstein": [4.0, 20.0, 26.5, -6.0],
    "light-flyby/eddington-finkelstein": [20.0, 42.0, 150.0, -0.75],
    "light-capture/kerr-schild": [10.0, 22.0, 27.5, -60.0],
    "light-capture/painleve-gullstrand": [10.0, 16.0, 19.5, -60.0],
    "light-capture/eddington-finkelstein": [0.5, 2.0, 2.625, -0.09375],
    "light-trapped/kerr-schild": [4.0, 13.0, 14.25, -1.5],
    "light-trapped/painleve-gullstrand": [4.0, 11.0, 12.75, -1.5],
    "light-trapped/eddington-finkelstein": [4.0, 10.0, 11.625, -1.5],
    "light-radial-in/painleve-gullstrand": [2.0, 4.0, 7.0, -20.0],
    "light-inside/eddington-finkelstein": [0.125, 0.25, -0.3125],
    "light-critical/eddington-finkelstein": [10.0, 25.0, 60.0, -0.75],
}


def _exact(
    name: str, chart: str, x: list[float], v: list[float], times: list[float], **more: Any
) -> dict[str, Any]:
    return {"name": name, "chart": chart, "position": x, "velocity": v, "times": times, **more}


def _degenerate() -> list[dict[str, Any]]:
    orbits = []
    same_radius = ("areal", "kerr-schild", "painleve-gullstrand", "eddington-finkelstein")
    light = {"particle": "light"}
    for chart in same_radius:
        orbits += [
            _exact(
                f"circular-stable/{chart}", chart, [16.0, 0, 0], [0, 0.25, 0], [10.0, 1e3, -7.0]
            ),
            _exact(
                f"circular-unstable/{chart}", chart, [4.0, 0, 0], [0, 0, 0.5], [3.0, 40.0, -25.0]
            ),
            _exact(
                f"light-circular/{chart}",
                chart,
                [0, 3.0, 0],
                [1.0, 0, 0],
                [2.0, 30.0, -9.0],
                **light,
            ),
            _exact(
                f"light-critical/{chart}",
                chart,
                [18.0, 0, 0],
                [-10.0, 3.0, 0],
                [10.0, 25.0, 60.0, -40.0],
                **light,
            ),
        ]
    h = "harmonic"
    orbits += [
        _exact(f"circular-stable/{h}", h, [15.0, 0, 0], [0, 15 / 64, 0], [10.0, 1e3, -7.0]),
        _exact(f"circular-unstable/{h}", h, [0, 3.0, 0], [0.375, 0, 0], [3.0, 40.0, -25.0]),
        _exact(f"light-circular/{h}", h, [2.0, 0, 0], [0, 0, 1.0], [2.0, 30.0, -9.0], **light),
        _exact(
            f"light-critical/{h}", h, [17.0, 0, 0], [-60.0, 17.0, 0], [9.0, 60.0, -40.0], **light
        ),
        _exact("whirl-in/areal", "areal", [8.0, 0, 0], [-3 / 16, 3 / 8, 0], [9.0, 90.0, -50.0]),
        _exact("whirl-out/areal", "areal", [8.0, 0, 0], [3 / 16, 3 / 8, 0], [9.0, 300.0, -70.0]),
        _exact("whirl-in/harmonic", h, [7.0, 0, 0], [-3 / 16, 21 / 64, 0], [9.0, 90.0, -50.0]),
        _exact("whirl-out/harmonic", h, [7.0, 0, 0], [3 / 16, 21 / 64, 0], [9.0, 300.0, -70.0]),
    ]
    ef = "eddington-finkelstein"
    orbits += [
        _exact(f"whirl-in/{ef}", ef, [8.0, 0, 0], [-0.25, 0.5, 0], [9.0, 90.0, -50.0]),
        # E = 1 exactly: (rdot + 2/r)^2 + vt^2 = 2/r in this chart.
        _exact(f"parabolic-in/{ef}", ef, [64.0, 0, 0], [-5 / 32, 1 / 8, 0], [90.0, 1e3, -300.0]),
        _exact(f"parabolic-out/{ef}", ef, [16.0, 0, 0], [1 / 8, 1 / 4, 0], [50.0, 1e3, -300.0]),
        _exact(
            f"parabolic-capture/{ef}", ef, [16.0, 0, 0], [-3 / 8, 1 / 4, 0], [9.0, 21.0, -300.0]
        ),
        _exact(
            "parabolic-radial-in/areal", "areal", [8.0, 0, 0], [-3 / 8, 0, 0], [9.0, 25.0, -90.0]
        ),
        _exact(
            "parabolic-radial-out/areal", "areal", [8.0, 0, 0], [3 / 8, 0, 0], [9.0, 1e3, -12.0]
        ),
    ]
    return orbits


def _inside() -> list[dict[str, Any]]:
    """Starts between the horizon and r = 0, in the ingoing charts."""
    orbits = []
    for chart, x, v in (
        ("kerr-schild", [1.25, 0.5, 0.25], [-0.75, 0.25, 0.0]),
        ("painleve-gullstrand", [1.0, 1.0, -0.5], [-1.25, -0.75, 0.5]),
        ("eddington-finkelstein", [1.5, 0.0, 0.25], [-0.5, 0.25, 0.125]),
    ):
        orbits += [
            _exact(f"inside/{chart}", chart, x, v, [0.125, 0.375, -0.5]),
            _exact(f"light-inside/{chart}", chart, x, v, [0.125, 0.25, -0.5], particle="light"),
        ]
    return orbits


def _beside() -> list[dict[str, Any]]:
    """One unit in the last place beside degenerate starts."""
    up, down = nextafter(0.5, 1.0), nextafter(0.5, 0.0)
    whirl_up, whirl_down = nextafter(0.375, 1.0), nextafter(0.375, 0.0)
    isco = 1 / sqrt(6.0)
    light = {"particle": "light"}
    times = [50.0, 150.0, 300.0, -200.0]
    pg = "painleve-gullstrand"
    return [
        _exact("beside-unstable-up", "areal", [4.0, 0, 0], [0, up, 0], times),
        _exact("beside-unstable-down", "areal", [4.0, 0, 0], [0, down, 0], times),
        _exact("beside-unstable-up/pg", pg, [4.0, 0, 0], [0, up, 0], times),
        _exact("beside-whirl-up", "areal", [8.0, 0, 0], [-3 / 16, whirl_up, 0], times),
        _exact("beside-whirl-down", "areal", [8.0, 0, 0], [-3 / 16, whirl_down, 0], times),
        _exact("innermost", "areal", [6.0, 0, 0], [0, isco, 0], [100.0, 2000.0, -500.0]),
        _exact(
            "innermost-up", "areal", [6.0, 0, 0], [0, nextafter(isco, 1.0), 0], [100.0, 2e3, -500.0]
        ),
        _exact(
            "beside-ring", "areal", [3.0, 0, 0], [2.0**-53, 1.0, 0], [50.0, 150.0, -100.0], **light
        ),
        _exact(
            "beside-ring-in", "harmonic", [2.0, 0, 0], [-(2.0**-53), 1.0, 0], [50.0, 99.0], **light
        ),
        _exact(
            "beside-critical",
            "areal",
            [18.0, 0, 0],
            [-10.0, nextafter(3.0, 4.0), 0],
            [40.0, 120.0, 250.0],
            **light,
        ),
        _exact("beside-circle", "areal", [16.0, 0, 0], [0, nextafter(0.25, 1.0), 0], [50.0, 1e3]),
    ]


def _weak() -> list[dict[str, Any]]:
    """Weak fields in SI and km: an eccentric Earth satellite in every chart, planets, light."""
    earth = {"system": "SI", "gm": 3.986004418e14}
    sun = {"system": "SI", "gm": 1.32712440041e20}
    orbits = []
    for k, chart in enumerate(CHARTS):
        clock = "proper" if k % 2 else "coordinate"
        orbits.append(
            _exact(
                f"satellite/{chart}",
                chart,
                [6.8e6, 1.0e5, -2.5e5],
                [-120.0, 9300.0, 1500.0],
                [600.0, 7000.5, 20000.0, -3000.5],
                clock=clock,
                **earth,
            )
        )
    orbits += [
        _exact(
            "planet/isotropic",
            "isotropic",
            [4.6e10, 1e9, 5e9],
            [100.0, 58900.0, 3000.0],
            [1e5, 7.6e6, 3.1e7, -1e6],
            **sun,
        ),
        _exact(
            "planet/harmonic-km",
            "harmonic",
            [4.6e7, 1e6, 5e6],
            [0.1, 58.9, 3.0],
            [1e5, 7.6e6, 3.1e7, -1e6],
            clock="proper",
            system="astronomical",
            gm=1.32712440041e11,
        ),
        _exact(
            "limb-ray/harmonic",
            "harmonic",
            [-1.5e11, 6.96e8, 0.0],
            [1.0, 0.0, 0.0],
            [400.0, 500.5, 1000.0, -100.0],
            particle="light",
            **sun,
        ),
        _exact(
            "comet/areal",
            "areal",
            [2e10, 0.0, 1e10],
            [-6000.0, 107000.0, 1000.0],
            [1e5, 1e7, -1e7],
            **sun,
        ),
    ]
    return orbits


def orbits() -> list[dict[str, Any]]:
    """All starts integrated directly: orbit-file keys, ``name`` and ``times`` (start time 0)."""
    found = []
    for name, particle, start, times, clock in CLASSES:
        for chart in CHARTS:
            if name == "light-radial-in" and chart == "eddington-finkelstein":
                continue  # ingoing radial light stands still in that chart's time: refused
            orbit = _carried(chart, *start, particle)
            found.append({"name": f"{name}/{chart}", **orbit, "clock": clock, "times": times})
    found += _degenerate() + _inside() + _beside() + _weak()
    defaults = {"system": "geometric", "gm": 1.0, "particle": "massive", "clock": "coordinate"}
    for orbit in found:
        orbit["times"] = list(EARLY.get(orbit["name"], orbit["times"]))
        orbit["position"] = [float(q) for q in orbit["position"]]
        orbit["velocity"] = [float(q) for q in orbit["velocity"]]
    return [{**defaults, **orbit} for orbit in found]


#: Orbits a million revolutions on: integrated over the remainder, turned by the azimuth.
FAR = [
    ("bound/areal", 1_000_000, 40.0),
    ("bound/harmonic", 1_000_000, -40.0),
    ("bound/kerr-schild", 250_000, 100.0),
    ("bound/painleve-gullstrand", -1_000_000, 30.0),
    ("bound-proper/eddington-finkelstein", 1_000_000, 55.0),
    ("bound-proper/isotropic", 123_456, 55.0),
    ("satellite/harmonic", 1_000_000, 777.0),
]
