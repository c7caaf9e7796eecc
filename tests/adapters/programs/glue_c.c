/* Prints xi at the times of times.txt from forcing.dat (two sources) and from coefficients. */
#include "forcing.h"

int main(void)
{
    nipc_forcing noise;
    char basis[32];
    double t, xi[2], first, last, intensity, z[6];
    FILE *file;
    int k, kind;
    if (nipc_read(&noise, "forcing.dat", 2)) return 3;
    file = fopen("coefficients.txt", "r");
    if (fscanf(file, "%31s %lf %lf %lf", basis, &first, &last, &intensity) != 4) return 4;
    for (k = 0; k < 6; k++)
        if (fscanf(file, "%lf", z + k) != 1) return 4;
    fclose(file);
    kind = !strcmp(basis, "legendre") ? NIPC_LEGENDRE
         : !strcmp(basis, "completed") ? NIPC_COMPLETED : NIPC_KARHUNEN_LOEVE;
    file = fopen("times.txt", "r");
    while (fscanf(file, "%lf", &t) == 1) {
        nipc_at(&noise, t, xi);
        printf("%.16e %.16e %.16e\n", xi[0], xi[1],
               nipc_white(kind, 6, z, intensity, first, last, t));
    }
    nipc_free(&noise);
    return 0;
}
