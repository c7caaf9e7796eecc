/* x' = v, v' = -k x + xi(t) as a library. Invented for the tests of adapters.
   Classical Runge-Kutta over two intervals of the forcing table at a time. */
#include <math.h>
#include <stdlib.h>

static void rates(const double *y, double xi, double k, double *f)
{
    f[0] = y[1];
    f[1] = -k * y[0] + xi;
}

static void step(double *y, const double *xi, double h, double k)
{
    double a[2], b[2], c[2], d[2], z[2];
    int i;
    rates(y, xi[0], k, a);
    for (i = 0; i < 2; i++) z[i] = y[i] + h / 2 * a[i];
    rates(z, xi[1], k, b);
    for (i = 0; i < 2; i++) z[i] = y[i] + h / 2 * b[i];
    rates(z, xi[1], k, c);
    for (i = 0; i < 2; i++) z[i] = y[i] + h * c[i];
    rates(z, xi[2], k, d);
    for (i = 0; i < 2; i++) y[i] += h / 6 * (a[i] + 2 * b[i] + 2 * c[i] + d[i]);
}

/* one run; the output times lie on every second point of the forcing table */
int propagate(const double *state, int n_times, const double *times, const double *parameters,
              int n_forcing, const double *forcing_times, const double *forcing, double *states)
{
    double y[2] = {state[0], state[1]}, h = forcing_times[2] - forcing_times[0];
    int i, done = 0;
    if (parameters[0] < -99) abort();
    if (parameters[0] < 0) return 5;
    for (i = 0; i < n_forcing; i++) {
        if (done < n_times && fabs(forcing_times[i] - times[done]) < 1e-9) {
            states[2 * done] = y[0];
            states[2 * done + 1] = y[1];
            done++;
        }
        if (i % 2 == 0 && i + 2 < n_forcing) step(y, forcing + i, h, parameters[0]);
    }
    return 0;
}

int propagate_many(int n_runs, const double *state, int n_times, const double *times,
                   const double *parameters, int n_forcing, const double *forcing_times,
                   const double *forcing, double *states)
{
    int r, bad = 0;
    for (r = 0; r < n_runs && !bad; r++)
        bad = propagate(state + 2 * r, n_times, times, parameters + r, n_forcing, forcing_times,
                        forcing + (long)r * n_forcing, states + 2L * n_times * r);
    return bad;
}

/* only the end of the run */
void finish(const double *state, double dt, const double *parameters, int n_forcing,
            const double *forcing, double *final)
{
    int i;
    final[0] = state[0];
    final[1] = state[1];
    for (i = 0; i + 2 < n_forcing; i += 2) step(final, forcing + i, 2 * dt, parameters[0]);
}

/* ends where x passes 1 */
int until_one(const double *state, int n_times, const double *times, double *states, double *ended)
{
    int i;
    for (i = 0; i < n_times; i++) {
        double x = state[0] + state[1] * (times[i] - times[0]);
        if (x > 1) {
            *ended = times[0] + (1 - state[0]) / state[1];
            return 7;
        }
        states[2 * i] = x;
        states[2 * i + 1] = state[1];
    }
    return 0;
}

int nothing(const double *state, int n_times, const double *times, double *states)
{
    int i;
    for (i = 0; i < n_times; i++) {
        states[2 * i] = state[0];
        states[2 * i + 1] = state[1];
    }
    return 0;
}

/* moves its arguments themselves, as many an old routine does */
void in_place(double *state, double *times, double *parameters, double *coefficients, double *final)
{
    state[0] += state[1] * (times[1] - times[0]);
    final[0] = state[0];
    final[1] = state[1];
    times[0] = parameters[0] = coefficients[0] = 1e9;
}
