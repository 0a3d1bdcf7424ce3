/* Heat conduction as an old code has it: one flat block of zones with ghost zones around, updated in place.

   The conductivity grows with the root of the temperature. Index (i, j) lies at i * (ny + 2 g) + j, so j, along y, is
   fastest. Two lines of old values are kept, because the zone to the left has been overwritten already. */

#include <math.h>
#include <stdlib.h>
#include <string.h>

static double flux(double a, double b) { return sqrt(0.5 * (a + b)) * (b - a); }

int heat_step(double *u, int nx, int ny, int g, double share)
{
    int pitch = ny + 2 * g;
    double *before = malloc(2 * (size_t)pitch * sizeof *before), *old = before + pitch, *swap, *base = before;
    if (before == NULL)
        return 1;
    memcpy(before, u + (g - 1) * pitch, pitch * sizeof *u);
    for (int i = g; i < nx + g; i++) {
        double *line = u + i * pitch;
        memcpy(old, line, pitch * sizeof *u);
        for (int j = g; j < ny + g; j++) {
            double x = flux(old[j], line[j + pitch]) - flux(before[j], old[j]);
            double y = flux(old[j], old[j + 1]) - flux(old[j - 1], old[j]);
            line[j] = old[j] + share * (x + y);
        }
        swap = before, before = old, old = swap;
    }
    free(base);
    return 0;
}
