/* A program that stays: one request and one answer a line (see adapters/persistent.py).
   x' = v, v' = -k x + xi(t) with the library's step. Its argument chooses a way to misbehave. */
#include "motion.c"
#include <stdio.h>
#include <string.h>
#include <unistd.h>

int main(int argc, char **argv)
{
    const char *way = argc > 1 ? argv[1] : "";
    int m, d, p, j, t, i;
    while (scanf("%d %d %d %d %d", &m, &d, &p, &j, &t) == 5) {
        double *times = malloc(m * sizeof(double)), *grid = malloc((t + 1) * sizeof(double));
        double *xi = malloc((t + 1) * sizeof(double)), *out = malloc(2 * m * sizeof(double));
        double state[2], k;
        for (i = 0; i < m; i++) scanf("%lf", times + i);
        scanf("%lf %lf %lf", state, state + 1, &k);
        for (i = 0; i < t; i++) scanf("%lf %lf", grid + i, xi + i);
        if (!strcmp(way, "hang")) sleep(60);
        if (!strcmp(way, "leave")) return 0;
        if (!strcmp(way, "die")) { fprintf(stderr, "no beam\n"); return 9; }
        if (!strcmp(way, "chat")) printf("hello\n");
        if (!strcmp(way, "error")) { printf("error the magnet is off\n"); fflush(stdout); continue; }
        if (!strcmp(way, "ended")) {
            printf("ended %.17g %.17g %.17g\n", times[0] + 0.1, state[0], state[1]);
            fflush(stdout);
            continue;
        }
        if (!strcmp(way, "idle")) nothing(state, m, times, out);
        else propagate(state, m, times, &k, t, grid, xi, out);
        printf("ok");
        for (i = 0; i < 2 * m - !strcmp(way, "short"); i++) printf(" %.17g", out[i]);
        printf("\n");
        fflush(stdout);
        free(times); free(grid); free(xi); free(out);
    }
    return 0;
}
