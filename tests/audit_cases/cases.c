/* Routines in the form a legacy code has them: flat arrays, work done in place or into an array of the caller's.
   u is padded by hx and hy ghost zones, the rest is not. All arithmetic is invented. */
#include <fenv.h>
#include <stdlib.h>
#include <string.h>
#ifdef __SSE2__
#include <xmmintrin.h>
#endif

#define U(i, j) u[((i) + hx) * (ny + 2 * hy) + (j) + hy]
#define OUT(i, j) out[(i) * ny + (j)]
#define ARGUMENTS double *u, double *w, double *out, long nx, long ny, long hx, long hy, long tile
#define EACH for (long i = 0; i < nx; i++) for (long j = 0; j < ny; j++)

void three(ARGUMENTS) { EACH OUT(i, j) = U(i + 1, j) - 2.0 * U(i, j) + U(i - 1, j); }

void five(ARGUMENTS) { EACH OUT(i, j) = U(i + 1, j) + U(i - 1, j) + U(i, j + 1) + U(i, j - 1); }

void product(ARGUMENTS) { EACH OUT(i, j) = U(i, j) * w[i * ny + j]; }

void with_work(ARGUMENTS) {
    double *work = malloc(nx * ny * sizeof(double));
    EACH work[i * ny + j] = 0.5 * U(i, j);
    EACH OUT(i, j) = work[i * ny + j] + 1.0;
    free(work);
}

void two_away(ARGUMENTS) { EACH OUT(i, j) = U(i + 2, j) - U(i - 2, j); }

void past_the_end(ARGUMENTS) { EACH OUT(i, j) = U(i, j) + 0.25 * u[i * ny + j + 1]; }

void looks_before(ARGUMENTS) { EACH OUT(i, j) = u[i * ny + j - ny] > 1e200 ? 0.0 : U(i, j); }

static double scratch[65536];
void static_scratch(ARGUMENTS) {
    EACH scratch[i * ny + j] = U(i, j) * U(i, j);
    EACH OUT(i, j) = scratch[i * ny + j] + 1.0;
}

static long calls = 0;
void static_counter(ARGUMENTS) { calls++; EACH OUT(i, j) = U(i, j) + 1e-3 * calls; }

static double last = 0.0;
void static_last(ARGUMENTS) { EACH OUT(i, j) = U(i, j) + last; last = U(0, 0); }

static double first = 0.0;
static int is_set = 0;
void static_first(ARGUMENTS) { if (!is_set) { first = U(0, 0); is_set = 1; } EACH OUT(i, j) = U(i, j) * first; }

static double common_block = 0.0;
void sets_common(ARGUMENTS) { common_block = U(1, 1); EACH OUT(i, j) = U(i, j); }
void uses_common(ARGUMENTS) { EACH OUT(i, j) = U(i, j) + common_block; }

void in_place(ARGUMENTS) { EACH U(i, j) *= 2.0; EACH OUT(i, j) = U(i, j); }

void in_place_undone(ARGUMENTS) {
    double kept = U(0, 0);
    U(0, 0) = 5.0;
    EACH OUT(i, j) = 2.0 * U(i, j);
    U(0, 0) = kept;
    OUT(0, 0) = 2.0 * kept;
}

void ghost_zones_set(ARGUMENTS) {
    for (long j = 0; j < ny; j++) U(-1, j) = U(0, j);
    EACH OUT(i, j) = U(i + 1, j) - U(i - 1, j);
}

void other_array_set(ARGUMENTS) { EACH { w[i * ny + j] = U(i, j); OUT(i, j) = U(i, j) * 3.0; } }

void overrun(ARGUMENTS) { for (long k = 0; k <= nx * ny; k++) out[k] = 2.0 * U(0, 0); EACH OUT(i, j) = U(i, j); }

void underrun(ARGUMENTS) { out[-1] = 0.0; EACH OUT(i, j) = U(i, j); }

void input_overrun(ARGUMENTS) { u[nx * ny] = 1.0; EACH OUT(i, j) = U(i, j); }

void partly(ARGUMENTS) { EACH if (j > 0) OUT(i, j) = U(i, j); }

void unset_work(ARGUMENTS) {
    double *work = malloc(nx * ny * sizeof(double));
    EACH if (i > 0) work[i * ny + j] = U(i, j);
    EACH OUT(i, j) = work[i * ny + j] > 1.0 ? 1.0 : U(i, j);
    free(work);
}

void diagonal(ARGUMENTS) { EACH OUT(i, j) = U(i + 1, j + 1) - U(i - 1, j - 1); }

void by_tile(ARGUMENTS) { EACH OUT(i, j) = U(i, j) * (tile == 4 ? 1.5 : 1.0); }

void by_local_place(ARGUMENTS) { EACH OUT(i, j) = U(i, j) + i * ny + j; }

void wrong_strides(ARGUMENTS) { EACH OUT(i, j) = u[j * nx + i]; }

void draws(ARGUMENTS) { EACH OUT(i, j) = U(i, j) + 1e-9 * rand(); }

void dies(ARGUMENTS) { volatile double *nowhere = 0; EACH OUT(i, j) = U(i, j) + *nowhere; }

void hangs(ARGUMENTS) { volatile double x = 1.0; while (x > 0.0) x = U(0, 0) * 0.0 + 1.0; OUT(0, 0) = x; }

/* What follows was thought up after the audit was written. */
void flushes(ARGUMENTS) {
#ifdef __SSE2__
    _mm_setcsr(_mm_getcsr() | 0x8040);
#else
    fesetround(FE_UPWARD);
#endif
    EACH OUT(i, j) = U(i, j) + 1.0;
}

void rounds_up(ARGUMENTS) { fesetround(FE_UPWARD); EACH OUT(i, j) = U(i, j) / 3.0; }

void far_overrun(ARGUMENTS) { out[nx * ny + 700] = 3.0; EACH OUT(i, j) = U(i, j); }

void far_read(ARGUMENTS) { EACH OUT(i, j) = U(i, j); if (u[nx * ny + 1400] > 1e250) OUT(0, 0) = 0; }

static double *sum = 0;
void heap_state(ARGUMENTS) { if (!sum) sum = calloc(1, 8); *sum += 1e-6; EACH OUT(i, j) = U(i, j) + *sum; }

static double *work = 0;
void heap_scratch(ARGUMENTS) {
    if (!work) work = malloc(1 << 16);
    EACH work[i * ny + j] = U(i, j);
    EACH OUT(i, j) = work[i * ny + j] * 2.0;
}

void in_place_when_hot(ARGUMENTS) { EACH OUT(i, j) = U(i, j) * 2.0; EACH if (U(i, j) > 1e5) U(i, j) = 1e5; }

void partly_when_hot(ARGUMENTS) { EACH if (U(i, j) < 1e5) OUT(i, j) = U(i, j); }

/* Takes an input for the one before when their first and last zones agree. */
static double memo_in[8192], memo_out[8192];
static long memo_size = 0;
void memo(ARGUMENTS) {
    long n = nx * ny;
    if (memo_size == n && memo_in[0] == U(0, 0) && memo_in[n - 1] == U(nx - 1, ny - 1)) {
        memcpy(out, memo_out, n * 8);
        return;
    }
    EACH { OUT(i, j) = U(i, j) * U(i, j); memo_in[i * ny + j] = U(i, j); }
    memcpy(memo_out, out, n * 8);
    memo_size = n;
}

static _Thread_local double mine = 0.0;
void thread_local_state(ARGUMENTS) { mine += 1.0; EACH OUT(i, j) = U(i, j) + mine; }
