"""The special functions the closed forms stand on, against printed values, in three libraries.

SciPy (float64: what the package uses), mpmath and Arb.  Sources: Carlson 1995, Numer. Algorithms
10, 13-26, sec. 3 (seen-2: SciPy's tests and a Maxima file quote it); Abramowitz & Stegun; DLMF.
Carlson's integrals: to all 14 printed digits.
"""

from __future__ import annotations

from math import asin, floor, gamma, log, log10, pi, radians, sin, sqrt

import mpmath
import pytest
from flint import acb
from scipy import special

# Fourteen significant digits are printed: half a unit of the last is 5e-15 to 5e-14 for the values
# here (parts between 0.04 and 2.8), and the libraries add a few units of 2.2e-16.

# function, arguments, value; status: seen-2 and recomputed with mpmath and Arb.
CARLSON = [
    ("rf", (1, 2, 0), 1.3110287771461),
    ("rf", (1j, -1j, 0), 1.8540746773014),
    ("rf", (1j - 1, 1j, 0), 0.79612586584234 - 1.2138566698365j),
    ("rf", (2, 3, 4), 0.58408284167715),
    ("rf", (1j, -1j, 2), 1.0441445654064),
    ("rf", (1j - 1, 1j, 1 - 1j), 0.93912050218619 - 0.53296252018635j),
    ("rc", (0, 0.25), pi),
    ("rc", (2.25, 2), log(2)),
    ("rc", (0, 1j), 1.1107207345396 * (1 - 1j)),
    ("rc", (-1j, 1j), 1.2260849569072 - 0.34471136988768j),
    ("rj", (0, 1, 2, 3), 0.77688623778582),
    ("rj", (2, 3, 4, 5), 0.14297579667157),
    ("rj", (2, 3, 4, -1 + 1j), 0.13613945827771 - 0.38207561624427j),
    ("rj", (1j, -1j, 0, 2), 1.6490011662711),
    ("rj", (-1 + 1j, -1 - 1j, 1, 2), 0.94148358841220),
    ("rj", (1j, -1j, 0, 1 - 1j), 1.8260115229009 + 1.2290661908643j),
    ("rj", (-1 + 1j, -1 - 1j, 1, -3 + 1j), -0.61127970812028 - 1.0684038390007j),
    ("rd", (0, 2, 1), 1.7972103521034),
    ("rd", (2, 3, 4), 0.16510527294261),
    ("rd", (1j, -1j, 2), 0.65933854154220),
    ("rd", (0, 1j, -1j), 1.2708196271910 + 2.7811120159521j),
    ("rd", (0, 1j - 1, 1j), -1.8577235439239 - 0.96193450888839j),
    ("rd", (-2 - 1j, -1j, -1 + 1j), 1.8249027393704 - 1.2218475784827j),
    ("rg", (2, 3, 4), 1.7255030280692),
    ("rg", (0, 1j, -1j), 0.42360654239699),
    ("rg", (0, 0.0796, 4), 1.0284758090288),
]


def printed_agree(found, value):
    """Real and imaginary part to half a unit of the fourteenth digit and 2 ulp of the size."""
    for a, b in ((found.real, value.real), (found.imag, value.imag)):
        digit = 10.0 ** (floor(log10(abs(b))) - 13) if b else 0.0
        assert abs(a - b) <= 0.5 * digit + 3e-16 * max(1.0, abs(value)), (found, value)


@pytest.mark.parametrize(("name", "arguments", "value"), CARLSON, ids=lambda v: str(v))
def test_carlson(name, arguments, value):
    """Each in SciPy, mpmath and Arb, to all printed digits."""
    printed_agree(complex(getattr(special, f"ellip{name}")(*arguments)), complex(value))
    with mpmath.workdps(30):
        printed_agree(complex(getattr(mpmath, f"ellip{name}")(*arguments)), complex(value))
    if name == "rc":
        return  # Arb has R_C as R_F(x, y, y), with another branch for some complex arguments
    x = [acb(a) if not isinstance(a, complex) else acb(a.real, a.imag) for a in arguments]
    ball = getattr(acb, f"elliptic_{name}")(*x)
    printed_agree(complex(ball), complex(value))


@pytest.mark.parametrize(
    ("arguments", "value"),
    [((2, 3, 4, -0.5), 0.24723819703052), ((2, 3, 4, -5), -0.12711230042964)],
)
def test_carlson_principal_values(arguments, value):
    """p < 0: SciPy returns the Cauchy principal value; mpmath and Arb a complex number whose real
    part it is (imaginary parts -0.750984, -0.209906)."""
    printed_agree(complex(special.elliprj(*arguments)), complex(value))
    with mpmath.workdps(30):
        printed_agree(complex(complex(mpmath.elliprj(*arguments)).real), complex(value))
    ball = complex(acb.elliptic_rj(*(acb(a) for a in arguments)))
    printed_agree(complex(ball.real), complex(value))
    # R_C(1/4, -2) = ln 2/3, principal value as well
    assert special.elliprc(0.25, -2) == pytest.approx(log(2) / 3, rel=1e-15)


def test_handbook_first_and_second_kind():
    """DLMF sec. 19.36 example (from memory): R_F(1,2,4); A&S Tables 17.5 (p. 614) and 17.6 (p.
    617), seen-2, 8 decimals; K(1/2), E(1/2): A&S Table 17.1 (from memory); all recomputed."""
    assert special.elliprf(1, 2, 4) == pytest.approx(0.6850858166, abs=5e-11)
    assert special.elliprf(1, 2, 4) == pytest.approx(0.685085816633436, abs=1e-15)
    for phi, alpha, printed, digits in (
        (45, 20, 0.79398143, 0.793981429961733),
        (50, 40, 0.91725487, 0.917254867988612),
    ):
        found = special.ellipkinc(radians(phi), sin(radians(alpha)) ** 2)
        assert found == pytest.approx(printed, abs=6e-9)
        assert found == pytest.approx(digits, abs=1e-15)
    second = special.ellipeinc(radians(35), sin(radians(52)) ** 2)
    assert second == pytest.approx(0.58823065, abs=6e-9)
    assert second == pytest.approx(0.588230651367917, abs=1e-15)
    assert special.ellipk(0.5) == pytest.approx(1.854074677301372, abs=1e-15)
    assert special.ellipe(0.5) == pytest.approx(1.350643881047675, abs=1e-15)


@pytest.mark.parametrize(
    ("n", "printed", "digits"),
    [
        (1 / 16, 0.813845, 0.813845432973),
        (5 / 8, 0.92113, 0.921129573331),
        (5 / 4, 1.13214, 1.13213569487),
        (-1 / 4, 0.76987, 0.769872357408),
    ],
)
def test_handbook_third_kind(n, printed, digits):
    """Pi(n; 45 deg \\ 30 deg), A&S sec. 17.8 examples 15-18 (from memory, recomputed), from R_F
    and R_J as the closed forms use them; mpmath's real part. At n = 5/4 < 1/sin^2 there is no
    pole yet."""
    s, m = sin(pi / 4), sin(pi / 6) ** 2
    delta = 1 - m * s * s
    rf = special.elliprf(1 - s * s, delta, 1.0)
    found = s * rf + n / 3 * s**3 * special.elliprj(1 - s * s, delta, 1.0, 1 - n * s * s)
    assert found == pytest.approx(printed, abs=6e-6)
    assert found == pytest.approx(digits, abs=1e-11)
    with mpmath.workdps(30):
        other = mpmath.re(mpmath.ellippi(n, mpmath.pi / 4, mpmath.sin(mpmath.pi / 6) ** 2))
    assert float(other) == pytest.approx(digits, abs=1e-11)


def test_handbook_functions():
    """nc(1.99650|.64) = -1392.11; dn(.20|.19) = .996253; dn(.20|.81) = .98406 (A&S sec. 16
    examples, from memory); recomputed -1392.11114434, .996252664327, .984056028965."""
    assert 1 / special.ellipj(1.99650, 0.64)[1] == pytest.approx(-1392.11114434, rel=1e-11)
    assert special.ellipj(0.20, 0.19)[2] == pytest.approx(0.996252664327, abs=1e-12)
    assert special.ellipj(0.20, 0.81)[2] == pytest.approx(0.984056028965, abs=1e-12)
    # equianharmonic and lemniscatic half periods (A&S 18.13, 18.14; DLMF 23.5; from memory)
    assert gamma(1 / 3) ** 3 / (4 * pi) == pytest.approx(1.529954037057192, rel=1e-15)
    assert special.ellipk(0.5) == pytest.approx(1.85407467730137, rel=1e-14)
    # 2F1 as used for falls from the horizon: E = 0 gives 3 pi/4, E = 1 gives 1 (recomputed)
    assert special.hyp2f1(0.5, 1.5, 2.5, 1.0) == pytest.approx(0.75 * pi, rel=1e-15)
    half = 3 * (asin(sqrt(0.5)) - sqrt(0.25)) / (2 * sqrt(0.5) ** 3)
    assert special.hyp2f1(0.5, 1.5, 2.5, 0.5) == pytest.approx(half, rel=3e-15)
