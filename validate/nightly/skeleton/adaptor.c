/* Lets truefall run a propagator written in C.

       cc -O2 -ffp-contract=off -o adaptor_c adaptor.c -lm
       ./adaptor_c ORBIT.toml OUT.csv

   Replace `rates` and the loop in `main` by your own code; reading and writing can stay.  What
   stands here integrates the geodesic equation of a massive particle in the areal chart with the
   classical fourth-order Runge-Kutta method and a fixed step.  The orbit file is one that
   truefall wrote for this program: one key a line, always with position, velocity and times. */

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { STEPS_PER_RADIAN = 200 };

static double gm, c, energy, momentum2;

static void fail(const char *sentence)
{
    fprintf(stderr, "%s\n", sentence);
    exit(1);
}

/* What stands after "key = ", at the beginning of a line. */
static const char *value(const char *text, const char *key)
{
    size_t length = strlen(key);
    for (const char *line = text; line; line = strchr(line, '\n')) {
        line += *line == '\n';
        if (strncmp(line, key, length) == 0 && strncmp(line + length, " = ", 3) == 0)
            return line + length + 3;
    }
    fprintf(stderr, "no key %s in the orbit file\n", key);
    exit(1);
}

static int is(const char *text, const char *key, const char *word)
{
    const char *at = value(text, key);
    return *at == '"' && strncmp(at + 1, word, strlen(word)) == 0 && at[1 + strlen(word)] == '"';
}

/* Numbers of a list "[1.0, 2.0]"; with room = 0 they are only counted. */
static size_t numbers(const char *at, double *into, size_t room)
{
    size_t count = 0;
    char *end;
    for (at += *at == '['; ; at = end + strspn(end, ", ")) {
        double number = strtod(at, &end);
        if (end == at)
            return count;
        if (count < room)
            into[count] = number;
        count++;
    }
}

static double dot(const double *a, const double *b)
{
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
}

/* d/dt of s = (x, w), where w = d x / d (proper time). */
static void rates(const double *s, double *rate)
{
    double r2 = dot(s, s), r = sqrt(r2);
    double slow = (1.0 - 2.0 * gm / (c * c * r)) / energy; /* d (proper time) / dt */
    double pull = -gm / (r2 * r) * (1.0 + 3.0 * momentum2 / (c * c * r2)) * slow;
    for (int k = 0; k < 3; k++) {
        rate[k] = slow * s[3 + k];
        rate[3 + k] = pull * s[k];
    }
}

static void step(double *s, double h)
{
    double k1[6], k2[6], k3[6], k4[6], t[6];
    rates(s, k1);
    for (int k = 0; k < 6; k++) t[k] = s[k] + h / 2 * k1[k];
    rates(t, k2);
    for (int k = 0; k < 6; k++) t[k] = s[k] + h / 2 * k2[k];
    rates(t, k3);
    for (int k = 0; k < 6; k++) t[k] = s[k] + h * k3[k];
    rates(t, k4);
    for (int k = 0; k < 6; k++) s[k] += h / 6 * (k1[k] + 2 * k2[k] + 2 * k3[k] + k4[k]);
}

static char *read_all(const char *path)
{
    FILE *file = fopen(path, "rb");
    if (!file || fseek(file, 0, SEEK_END) != 0)
        fail("cannot read the orbit file");
    long size = ftell(file);
    char *text = malloc((size_t)size + 1);
    rewind(file);
    if (!text || fread(text, 1, (size_t)size, file) != (size_t)size)
        fail("cannot read the orbit file");
    text[size] = 0;
    fclose(file);
    return text;
}

int main(int argc, char **argv)
{
    if (argc != 3)
        fail("usage: adaptor_c ORBIT.toml OUT.csv");
    char *text = read_all(argv[1]);
    if (!is(text, "particle", "massive") || !is(text, "chart", "areal")
        || !is(text, "clock", "coordinate"))
        fail("this adaptor knows massive particles in the areal chart, in its time");
    c = is(text, "system", "SI") ? 299792458.0 : is(text, "system", "geometric") ? 1.0 : 299792.458;
    gm = strtod(value(text, "gm"), NULL);

    double s[6], rate[6], time = strtod(value(text, "start.time"), NULL);
    double *v = s + 3;
    if (numbers(value(text, "start.position"), s, 3) != 3
        || numbers(value(text, "start.velocity"), v, 3) != 3)
        fail("position and velocity must have three components");
    size_t n = numbers(value(text, "times"), NULL, 0);
    double *times = malloc(n * sizeof *times);
    if (!times)
        fail("not enough memory");
    numbers(value(text, "times"), times, n);

    /* constants of the motion, and w = d x / d (proper time) in place of v */
    double r = sqrt(dot(s, s)), f = 1.0 - 2.0 * gm / (c * c * r), radial = dot(s, v) / r;
    double across2 = dot(v, v) - radial * radial;
    double slow = sqrt(f - (radial * radial / f + across2) / (c * c));
    double speed = sqrt(dot(v, v));
    energy = f / slow;
    momentum2 = r * r * across2 / (slow * slow);
    for (int k = 0; k < 3; k++) v[k] /= slow;

    FILE *out = fopen(argv[2], "w");
    if (!out)
        fail("cannot write the output file");
    fprintf(out, "time,x,y,z,vx,vy,vz\n");
    for (size_t row = 0; row < n; row++) {
        double apart = times[row] - time;
        r = sqrt(dot(s, s));
        double turn = fabs(apart) * fmax(sqrt(gm / (r * r * r)), speed / r);
        long count = turn > 0 ? (long)ceil(turn * STEPS_PER_RADIAN) : apart != 0;
        for (long k = 0; k < count; k++) step(s, apart / (double)count);
        time = times[row];
        rates(s, rate);
        speed = sqrt(dot(rate, rate));
        /* 17 digits keep every bit */
        fprintf(out, "%.17g,%.17g,%.17g,%.17g,%.17g,%.17g,%.17g\n", time, s[0], s[1], s[2],
                rate[0], rate[1], rate[2]);
    }
    if (fclose(out) != 0)
        fail("cannot write the output file");
    free(times);
    free(text);
    return 0;
}
