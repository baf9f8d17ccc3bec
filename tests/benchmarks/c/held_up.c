/* How long a post holds a solver up, beside one memcpy of the same size, taken in turn within one run.
 *
 *     held_up N_POINTS N_POSTS PAUSE_MS [WAITING_MIB]
 *
 * The copies go round a ring of three batches, as the client's do, so both find their target equally cold. One line for
 * each pair, in seconds: of the clock for post and copy, and of the solver's own processor time for post and copy.
 */
#define _POSIX_C_SOURCE 200809L
#include "slackwater.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

enum { FIELDS = 2, RING = 24 };

static double now(clockid_t clock)
{
    struct timespec t;
    (void)clock_gettime(clock, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

/* The solver makes a new snapshot, so that the source is as warm for both. */
static void advance(float *values, size_t n, size_t step)
{
    for (size_t k = 0; k < n; k++)
        values[k] = values[k] * 0.9f + (float)((k * 2654435761u + step * 40503u) & 0xffffu) * 1e-5f;
}

int main(int argc, char **argv)
{
    char error[SLACKWATER_TEXT_BYTES], declaration[512];
    if (argc < 4)
        return 2;
    size_t n_points = strtoul(argv[1], NULL, 10), n_posts = strtoul(argv[2], NULL, 10), n = FIELDS * n_points;
    double pause_ms = strtod(argv[3], NULL);
    slackwater_settings settings = SLACKWATER_DEFAULTS;
    settings.batch_snapshots = 8;
    settings.max_waiting_bytes = argc > 4 ? strtoul(argv[4], NULL, 10) << 20 : 0;
    (void)snprintf(declaration, sizeof declaration,
                   "{\"name\": \"held up\", \"n_points\": %zu, \"fields\": [{\"name\": \"u\"}, {\"name\": \"v\"}],"
                   " \"retained_rank\": 4, \"block_length\": 8, \"criterion\": {\"n_modes\": 2}}", n_points);
    slackwater *run = slackwater_declare(&settings, declaration, error);
    float *values = calloc(n, sizeof *values), *ring = calloc(RING * n, sizeof *ring);
    if (run == NULL || values == NULL || ring == NULL) {
        fprintf(stderr, "no run or no memory: %s\n", run == NULL ? error : "");
        return 1;
    }
    memset(ring, 1, RING * n * sizeof *ring);
    const float *fields[FIELDS] = {values, values + n_points};
    struct timespec pause = {(time_t)(pause_ms / 1e3), (long)(1e6 * (pause_ms - 1e3 * (double)(long)(pause_ms / 1e3)))};
    for (size_t k = 0; k < n_posts; k++) {
        double spent[2], used[2];
        for (size_t turn = k; turn < k + 2; turn++) { /* who goes first changes from pair to pair */
            advance(values, n, k);
            double used_before = now(CLOCK_THREAD_CPUTIME_ID), began = now(CLOCK_MONOTONIC);
            if (turn % 2 == 0)
                (void)slackwater_post_float(run, (double)k, fields, FIELDS, n_points);
            else
                memcpy(ring + k % RING * n, values, n * sizeof *values);
            spent[turn % 2] = now(CLOCK_MONOTONIC) - began;
            used[turn % 2] = now(CLOCK_THREAD_CPUTIME_ID) - used_before;
        }
        printf("%.9f %.9f %.9f %.9f\n", spent[0], spent[1], used[0], used[1]);
        (void)nanosleep(&pause, NULL);
    }
    fprintf(stderr, "%g\n", (double)ring[n / 2]); /* the copies are used, so none is left out */
    slackwater_state last;
    if (slackwater_close(run, &last, error) != SLACKWATER_OK)
        fprintf(stderr, "%s\n", error);
    free(values);
    free(ring);
    return last.sent_snapshots == (long long)n_posts ? 0 : 3;
}
