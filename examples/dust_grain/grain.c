/* A charged grain that floats in the sheath over an electrode: an invented library, as such are.

   Height z (mm) over its place of rest and speed v (mm/s) under weight, a field that falls off
   with height, drag and a noise of the field that is read from a table:
       z' = v,   v' = -g (1 - exp(-z / L)) - drag v + noise(t)
   with g = 9810 mm/s^2. Leapfrog, with drag and noise in the half kicks; the table's even steps
   are the integrator's too. */
#include <math.h>

#define WEIGHT 9810.0 /* mm/s^2 */
#define LENGTH 2.5    /* mm: small motions have a period of 0.1 s */

static double push(double z) { return -WEIGHT * (1.0 - exp(-z / LENGTH)); }

/* One grain from times[0] on; states (n_times, 2) at times, 0 when all went well. */
int float_one(const double *state, int n_times, const double *times, const double *drag,
              int n_forcing, const double *forcing_times, const double *forcing, double *states)
{
    double z = state[0], v = state[1];
    double h = (forcing_times[n_forcing - 1] - forcing_times[0]) / (n_forcing - 1);
    int i, done = 0;
    for (i = 0; i < n_forcing && done < n_times; i++) {
        if (forcing_times[i] > times[done] - 0.25 * h) {
            if (fabs(forcing_times[i] - times[done]) > 1e-6 * h) return 2; /* between two steps */
            states[2 * done] = z;
            states[2 * done + 1] = v;
            done++;
        }
        if (i + 1 < n_forcing) {
            v = (v + 0.5 * h * (push(z) + forcing[i])) / (1.0 + 0.5 * h * *drag);
            z += h * v;
            v = v * (1.0 - 0.5 * h * *drag) + 0.5 * h * (push(z) + forcing[i + 1]);
        }
    }
    return done == n_times ? 0 : 1;
}

/* Many grains with a drag and a row of forcing each. */
int float_many(int n_runs, const double *state, int n_times, const double *times,
               const double *drag, int n_forcing, const double *forcing_times,
               const double *forcing, double *states)
{
    int r, code = 0;
    for (r = 0; r < n_runs && code == 0; r++)
        code = float_one(state + 2 * r, n_times, times, drag + r, n_forcing, forcing_times,
                         forcing + (long)r * n_forcing, states + 2L * r * n_times);
    return code;
}
