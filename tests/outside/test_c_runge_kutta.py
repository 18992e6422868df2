"""Outside propagator 3: a C program, compiled here, with fixed steps of fourth order.

Isotropic coordinates from the metric ``-A dt^2 + B dx^2``, ``A = ((1-q)/(1+q))^2``,
``B = (1+q)^4``, ``q = 1/(2 rho)``, n = x/rho, s = n.v::

    d2x/dt2 = -(A'/2 n + s B' v - B' v^2/2 n)/B + (A'/A) s v
"""

from __future__ import annotations

import subprocess

import pytest

from truefall.validate.check import check_file

SOURCE = r"""
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

static void rate(const double *y, double *d) {
    double rho = sqrt(y[0]*y[0] + y[1]*y[1] + y[2]*y[2]), q = 0.5/rho, dq = -q/rho;
    double a = (1 - q)/(1 + q), A = a*a, dA = -4*a*dq/((1 + q)*(1 + q));
    double B = pow(1 + q, 4), dB = 4*pow(1 + q, 3)*dq, s = 0, v2 = 0;
    for (int k = 0; k < 3; k++) { s += y[k]*y[3 + k]/rho; v2 += y[3 + k]*y[3 + k]; }
    for (int k = 0; k < 3; k++) {
        double n = y[k]/rho, v = y[3 + k];
        d[k] = v;
        d[3 + k] = -(0.5*dA*n + s*dB*v - 0.5*dB*v2*n)/B + dA/A*s*v;
    }
}

int main(int count, char **words) {
    if (count != 3) return 2;
    double h = atof(words[1]), y[6] = {11, 0, 0, 0, 0.26, 0.03};
    int steps = atoi(words[2]);
    printf("# system = \"geometric\"\n# gm = 1.0\n# particle = \"massive\"\n");
    printf("# chart = \"isotropic\"\n# clock = \"coordinate\"\ntime,x,y,z,vx,vy,vz\n");
    for (int row = 0; row <= 100; row++) {
        printf("%.17g", row*steps*h);
        for (int k = 0; k < 6; k++) printf(",%.17g", y[k]);
        printf("\n");
        for (int i = 0; i < steps; i++) {
            double k1[6], k2[6], k3[6], k4[6], z[6];
            rate(y, k1);
            for (int k = 0; k < 6; k++) z[k] = y[k] + h/2*k1[k];
            rate(z, k2);
            for (int k = 0; k < 6; k++) z[k] = y[k] + h/2*k2[k];
            rate(z, k3);
            for (int k = 0; k < 6; k++) z[k] = y[k] + h*k3[k];
            rate(z, k4);
            for (int k = 0; k < 6; k++) y[k] += h/6*(k1[k] + 2*k2[k] + 2*k3[k] + k4[k]);
        }
    }
    return 0;
}
"""


@pytest.fixture(scope="module")
def program(require_tool, tmp_path_factory):
    compiler = require_tool("gcc")
    folder = tmp_path_factory.mktemp("c")
    (folder / "rk4.c").write_text(SOURCE, encoding="utf-8")
    subprocess.run(
        [compiler, "-O2", "-o", str(folder / "rk4"), str(folder / "rk4.c"), "-lm"], check=True
    )
    return folder / "rk4"


def judged(program, folder, step, per_row):
    done = subprocess.run(
        [program, repr(step), str(per_row)], capture_output=True, text=True, check=True
    )
    path = folder / f"run-{per_row}.csv"
    path.write_text(done.stdout, encoding="utf-8")
    (result,) = check_file(path, budget={"position": 3e-11})
    return result


def test_halving_the_step_divides_the_error_by_sixteen(program, tmp_path):
    """Fourth order seen from outside: errors in the JSON of two runs, and both verdicts."""
    coarse = judged(program, tmp_path, 0.125, 40)
    fine = judged(program, tmp_path, 0.0625, 80)
    errors = [r.as_json()["error"]["position"]["max"] for r in (coarse, fine)]

    assert [coarse.verdict, fine.verdict] == ["fail", "pass"]
    # 16 + O(step): 16.85, 16.46 seen at the last two halvings before rounding takes part
    assert 15.0 < errors[0] / errors[1] < 17.0
