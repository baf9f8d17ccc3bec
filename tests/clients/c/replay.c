/* Posts snapshots from a file, as a solver would, and prints what the client says; for the tests.
 *
 *     replay declare|attach|retake DECLARATION|RUN VALUES N_SNAPSHOTS N_FIELDS N_POINTS [name=value ...]
 *
 * VALUES is a file of float32 (or float64 with wide=1) values, snapshot by snapshot. Settings: batch, memory, hold,
 * start, idle, flush, wide, joined (all fields from one array), untimed, first (snapshot to begin with),
 * repeat (each post once more), pause_ms (between posts), detach (instead of close), until_advice, weights and axes
 * (how many of which are put first: 1, 2, 3, ...).
 * Reports the longest time that a post took, in milliseconds.
 * Prints one JSON object; ends with the result of the last call.
 */
#define _POSIX_C_SOURCE 200809L
#include "slackwater.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

static double setting(int argc, char **argv, const char *name, double otherwise)
{
    size_t n = strlen(name);
    for (int k = 7; k < argc; k++)
        if (strncmp(argv[k], name, n) == 0 && argv[k][n] == '=')
            return strtod(argv[k] + n + 1, NULL);
    return otherwise;
}

static char *contents(const char *path, size_t *n)
{
    FILE *file = fopen(path, "rb");
    char *bytes = NULL;
    *n = 0;
    if (file == NULL || fseek(file, 0, SEEK_END) != 0)
        exit(90);
    *n = (size_t)ftell(file);
    rewind(file);
    bytes = malloc(*n + 1);
    if (bytes == NULL || fread(bytes, 1, *n, file) != *n)
        exit(91);
    bytes[*n] = '\0';
    (void)fclose(file);
    return bytes;
}

static void rest(double milliseconds)
{
    struct timespec pause = {(time_t)(milliseconds / 1e3), 0};
    pause.tv_nsec = (long)(1e6 * (milliseconds - 1e3 * (double)pause.tv_sec));
    if (milliseconds > 0.0)
        (void)nanosleep(&pause, NULL);
}

static int post(slackwater *run, double time, void *values, size_t n_fields, size_t n_points, int wide)
{
    const float *narrow_fields[64];
    const double *wide_fields[64];
    for (size_t k = 0; k < n_fields; k++) {
        narrow_fields[k] = (float *)values + k * n_points;
        wide_fields[k] = (double *)values + k * n_points;
    }
    return wide ? slackwater_post_double(run, time, wide_fields, n_fields, n_points)
                : slackwater_post_float(run, time, narrow_fields, n_fields, n_points);
}

static double now_ms(void)
{
    struct timespec t;
    (void)clock_gettime(CLOCK_MONOTONIC, &t);
    return 1e3 * (double)t.tv_sec + 1e-6 * (double)t.tv_nsec;
}

/* Put 1, 2, 3, ... as weights, and 0.5 of them as positions. */
static void put_geometry(slackwater *run, size_t n_weights, size_t n_points, size_t n_axes)
{
    char error[SLACKWATER_TEXT_BYTES] = "";
    size_t n = n_weights > n_points * n_axes ? n_weights : n_points * n_axes;
    double *values = malloc((n + 1) * sizeof *values);
    if (values == NULL)
        exit(94);
    for (size_t k = 0; k < n; k++)
        values[k] = (double)(k + 1);
    if (n_weights > 0 && slackwater_put_weights(run, values, n_weights, error) != SLACKWATER_OK)
        fprintf(stderr, "no weights: %s\n", error);
    for (size_t k = 0; k < n; k++)
        values[k] *= 0.5;
    if (n_axes > 0 && slackwater_put_positions(run, values, n_points, n_axes, error) != SLACKWATER_OK)
        fprintf(stderr, "no positions: %s\n", error);
    free(values);
}

int main(int argc, char **argv)
{
    char error[SLACKWATER_TEXT_BYTES];
    size_t n_bytes, counts[9] = {0};
    if (argc < 7)
        return 92;
    slackwater_settings settings = SLACKWATER_DEFAULTS;
    settings.batch_snapshots = (size_t)setting(argc, argv, "batch", 0);
    settings.max_waiting_bytes = (size_t)setting(argc, argv, "memory", 0);
    settings.hold_seconds = setting(argc, argv, "hold", 0);
    settings.start_seconds = setting(argc, argv, "start", 0);
    settings.idle_seconds = setting(argc, argv, "idle", 0);
    settings.flush_seconds = setting(argc, argv, "flush", 0);
    slackwater *run = NULL;
    if (strcmp(argv[1], "declare") == 0) {
        char *declaration = contents(argv[2], &n_bytes);
        run = slackwater_declare(&settings, declaration, error);
        free(declaration);
    } else {
        run = slackwater_attach(&settings, argv[2], error);
    }
    if (run == NULL || error[0] != '\0')
        fprintf(stderr, "%s: %s\n", run == NULL ? "no run" : "a run, but", error);
    char run_id[128];
    (void)snprintf(run_id, sizeof run_id, "%s", slackwater_run_id(run));
    size_t n_snapshots = strtoul(argv[4], NULL, 10), n_fields = strtoul(argv[5], NULL, 10);
    size_t n_points = strtoul(argv[6], NULL, 10);
    int wide = setting(argc, argv, "wide", 0) > 0, joined = setting(argc, argv, "joined", 0) > 0;
    char *values = contents(argv[3], &n_bytes);
    double longest_ms = 0.0;
    put_geometry(run, (size_t)setting(argc, argv, "weights", 0), n_points, (size_t)setting(argc, argv, "axes", 0));
    size_t one = n_fields * n_points * (wide ? 8 : 4);
    for (size_t k = (size_t)setting(argc, argv, "first", 0); k < n_snapshots; k++) {
        double time = setting(argc, argv, "untimed", 0) > 0 ? NAN : 0.5 * (double)k + 1e-3 / 3.0;
        void *copy = malloc(one); /* gone after the post, as a solver's fields are overwritten */
        if (copy == NULL)
            return 93;
        memcpy(copy, values + k % (n_bytes / one) * one, one);
        double began = now_ms();
        counts[post(run, time, copy, joined ? 1 : n_fields, joined ? n_fields * n_points : n_points, wide)]++;
        for (int more = setting(argc, argv, "repeat", 0) > 0; more > 0; more--)
            counts[post(run, time, copy, n_fields, n_points, wide)]++;
        longest_ms = now_ms() - began > longest_ms ? now_ms() - began : longest_ms;
        free(copy);
        if (slackwater_advise(run) == SLACKWATER_MAY_STOP && setting(argc, argv, "until_advice", 0) > 0)
            break;
        rest(setting(argc, argv, "pause_ms", 0));
    }
    int advice = slackwater_advise(run) == SLACKWATER_MAY_STOP;
    slackwater_state state;
    int result = setting(argc, argv, "detach", 0) > 0 ? slackwater_detach(run, &state, error)
                                                      : slackwater_close(run, &state, error);
    printf("{\"run\": \"%s\", \"result\": %d, \"advice\": %d, \"sent\": %lld, \"waiting\": %lld, \"lost\": %lld, "
           "\"skipped\": %lld, \"held\": %lld, \"longest_ms\": %.3f, \"verdict\": \"%s\", \"posts\": [",
           run_id, result, advice, state.sent_snapshots, state.waiting_snapshots, state.lost_snapshots,
           state.skipped_snapshots, state.held_snapshots, longest_ms, state.verdict);
    for (size_t k = 0; k < 9; k++)
        printf("%s%zu", k > 0 ? ", " : "", counts[k]);
    printf("]}\n");
    if (error[0] != '\0')
        fprintf(stderr, "at the end: %s\n", error);
    free(values);
    return result;
}
