/* xi_j(t) for programs that can add one call: nipc's noise, from its table or its coefficients.

       nipc_forcing noise;
       if (nipc_read(&noise, "forcing.dat", n_sources)) ...   rows of t xi_1 ... xi_J, '#' comments
       nipc_at(&noise, t, xi);                                xi[0 .. n_sources - 1]
       nipc_free(&noise);

   Between the table's even rows a polynomial of degree seven through the eight nearest is taken: the
   noise is smooth, and with 20 rows a wave the error is some 1e-7 of it, with 100 some 3e-13.

       xi = nipc_white(basis, n, coefficients, intensity, first, last, t);

   is the path of one white source from its n standard coefficients on the arc from first to last:
   xi(t) = intensity / sqrt(last - first) sum_k Z_k f_k((t - first) / (last - first)); basis is
   NIPC_LEGENDRE, NIPC_KARHUNEN_LOEVE or NIPC_COMPLETED. Link with -lm. nipc_read returns 0, or not
   0 after having said on standard error what is wrong; nipc_at outside the table gives NaN. */
#ifndef NIPC_FORCING_H
#define NIPC_FORCING_H

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define NIPC_POINTS 8
enum { NIPC_LEGENDRE, NIPC_KARHUNEN_LOEVE, NIPC_COMPLETED };

typedef struct {
    int sources, rows;
    double start, step;
    double *values; /* (rows, sources) */
} nipc_forcing;

static void nipc_free(nipc_forcing *f)
{
    free(f->values);
    f->values = NULL;
    f->rows = 0;
}

static int nipc_refuse(nipc_forcing *f, const char *file, int line, const char *why)
{
    if (line > 0) fprintf(stderr, "%s, line %d %s\n", file, line, why);
    else fprintf(stderr, "%s %s\n", file, why);
    nipc_free(f);
    return 1;
}

static int nipc_read(nipc_forcing *f, const char *file, int sources)
{
    FILE *stream = fopen(file, "r");
    char line[4096], *at, *end;
    double *times = NULL;
    int number = 0, room = 0, j, i, bad = 0;
    memset(f, 0, sizeof *f);
    f->sources = sources;
    if (!stream) return nipc_refuse(f, file, 0, "cannot be opened");
    while (!bad && fgets(line, sizeof line, stream)) {
        number++;
        at = line + strspn(line, " \t\r\n");
        if (!*at || *at == '#') continue;
        if (f->rows == room) {
            double *more;
            room = room ? 2 * room : 1024;
            more = (double *)realloc(times, room * sizeof *times);
            if (more) times = more; else bad = 1;
            more = (double *)realloc(f->values, (size_t)room * sources * sizeof *f->values);
            if (more) f->values = more; else bad = 1;
            if (bad) break;
        }
        for (j = 0; j <= sources && !bad; j++) {
            double value = strtod(at, &end);
            if (end == at) bad = 1;
            else if (j == 0) times[f->rows] = value;
            else f->values[(size_t)f->rows * sources + j - 1] = value;
            at = end;
        }
        f->rows += !bad;
    }
    fclose(stream);
    if (bad) {
        free(times);
        return nipc_refuse(f, file, number, "is no row of t and a number for each source");
    }
    if (f->rows < 2) {
        free(times);
        return nipc_refuse(f, file, 0, "has fewer than two rows");
    }
    f->start = times[0];
    f->step = (times[f->rows - 1] - times[0]) / (f->rows - 1);
    for (i = 0; i < f->rows; i++)
        if (!(f->step > 0) || fabs(times[i] - f->start - i * f->step) > 1e-6 * f->step) bad = 1;
    free(times);
    return bad ? nipc_refuse(f, file, 0, "has rows at uneven times, or does not go forward") : 0;
}

/* Barycentric interpolation on even nodes: weights (-1)^i binomial(n, i) (Berrut & Trefethen 2004) */
static void nipc_at(const nipc_forcing *f, double t, double *xi)
{
    int n = f->rows < NIPC_POINTS ? f->rows : NIPC_POINTS, first, i, j;
    double u = (t - f->start) / f->step, weight = 1, total = 0;
    for (j = 0; j < f->sources; j++) xi[j] = 0;
    if (!(u >= -1e-6 && u <= f->rows - 1 + 1e-6)) {
        for (j = 0; j < f->sources; j++) xi[j] = NAN;
        return;
    }
    first = (int)floor(u) - n / 2 + 1;
    if (first > f->rows - n) first = f->rows - n;
    if (first < 0) first = 0;
    for (i = 0; i < n; i++) {
        const double *row = f->values + (size_t)(first + i) * f->sources;
        double gap = u - first - i;
        if (i) weight *= -(double)(n - i) / i;
        if (gap == 0) {
            for (j = 0; j < f->sources; j++) xi[j] = row[j];
            return;
        }
        total += weight / gap;
        for (j = 0; j < f->sources; j++) xi[j] += weight / gap * row[j];
    }
    for (j = 0; j < f->sources; j++) xi[j] /= total;
}

static double nipc_white(int basis, int n, const double *z, double intensity, double first,
                         double last, double t)
{
    const double pi = 3.14159265358979323846;
    double u = (t - first) / (last - first), xi = 0, before = 0, now = 1, next, rest = 1;
    int k;
    u = u < 0 ? 0 : u > 1 ? 1 : u;
    if (basis == NIPC_LEGENDRE) {
        for (k = 0; k < n; k++) {
            xi += z[k] * sqrt(2.0 * k + 1) * now;
            next = ((2 * k + 1) * (2 * u - 1) * now - k * before) / (k + 1);
            before = now;
            now = next;
        }
    } else {
        int cosines = basis == NIPC_COMPLETED ? n - 1 : n;
        for (k = 1; k <= cosines; k++) {
            double w = (k - 0.5) * pi, overlap = sqrt(2.0) * sin(w) / w;
            xi += z[k - 1] * sqrt(2.0) * cos(w * u);
            now -= overlap * sqrt(2.0) * cos(w * u); /* the constant less its parts */
            rest -= overlap * overlap;
        }
        if (basis == NIPC_COMPLETED) xi += z[n - 1] * now / sqrt(rest);
    }
    return xi * intensity / sqrt(last - first);
}

#endif
