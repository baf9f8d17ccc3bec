/* The mixing duct of ../c on several ranks, each with some of its rows; all ranks stop together on the verdict.
 *
 *     make && mpiexec -n 4 ./mixing_duct_mpi
 *
 * Every rank advances its rows and exchanges the rows at its edges. At each step that is posted, rank 0 gathers the
 * field, posts it, and tells all ranks the same advice, so that none goes on alone into the next exchange.
 */
#include "slackwater.h"

#include <math.h>
#include <mpi.h>
#include <stdio.h>
#include <stdlib.h>

enum { ROWS = 16, COLUMNS = 60, EVERY = 120, LONGEST = 400000 };

static const double SPACING = 0.01, STEP = 0.004, SPEED = 1.0, DIFFUSIVITY = 1.5e-3; /* m, s, m/s, m2/s */

static const char *DECLARATION =
    "{\"name\": \"mixing duct on ranks\", \"n_points\": 960, \"fields\": [{\"name\": \"T\", \"unit\": \"K\"}],"
    " \"grid\": {\"kind\": \"uniform\", \"shape\": [16, 60], \"spacing\": [0.01, 0.01]},"
    " \"time\": {\"unit\": \"s\"}, \"retained_rank\": 12,"
    " \"criterion\": {\"n_modes\": 2, \"max_angle_deg\": 10}}";

static int rank, n_ranks, first, n_rows; /* this rank has rows first .. first + n_rows - 1 */

/* Its temperature above the cold stream, K, with one more row on either side for the neighbours'. */
static float here[ROWS + 2][COLUMNS], before[ROWS + 2][COLUMNS];

static double draw(void)
{
    double sum = -6.0;
    for (int k = 0; k < 12; k++)
        sum += (double)rand() / ((double)RAND_MAX + 1.0); /* the same numbers on every rank */
    return sum;
}

static double wander(double value, double memory)
{
    double kept = exp(-STEP / memory);
    return kept * value + sqrt(1.0 - kept * kept) * draw();
}

static double inlet(int row, double pulse, double sway)
{
    double height = ((row + 0.5) / ROWS - 0.5 - 0.18 * sway) / 0.2;
    return (10.0 + 4.0 * pulse) * 0.5 * (1.0 + tanh(height));
}

/* Fill the outer rows: from the neighbours, or by the walls, through which nothing flows. */
static void exchange(void)
{
    int below = rank > 0 ? rank - 1 : MPI_PROC_NULL, above = rank < n_ranks - 1 ? rank + 1 : MPI_PROC_NULL;
    for (int i = 0; i < COLUMNS; i++) {
        before[0][i] = before[1][i];
        before[n_rows + 1][i] = before[n_rows][i];
    }
    MPI_Sendrecv(before[1], COLUMNS, MPI_FLOAT, below, 0, before[n_rows + 1], COLUMNS, MPI_FLOAT, above, 0,
                 MPI_COMM_WORLD, MPI_STATUS_IGNORE);
    MPI_Sendrecv(before[n_rows], COLUMNS, MPI_FLOAT, above, 1, before[0], COLUMNS, MPI_FLOAT, below, 1, MPI_COMM_WORLD,
                 MPI_STATUS_IGNORE);
}

static void advance(double pulse, double sway)
{
    for (int j = 1; j <= n_rows; j++)
        for (int i = 0; i < COLUMNS; i++)
            before[j][i] = here[j][i];
    exchange();
    for (int j = 1; j <= n_rows; j++) {
        for (int i = 0; i < COLUMNS; i++) {
            double now = before[j][i], upstream = i > 0 ? (double)before[j][i - 1] : inlet(first + j - 1, pulse, sway);
            double carried = -SPEED * (now - upstream) / SPACING;
            double spread = DIFFUSIVITY * (before[j - 1][i] - 2.0 * now + before[j + 1][i]) / (SPACING * SPACING);
            here[j][i] = (float)(now + STEP * (carried + spread));
        }
    }
}

/* Gather the field on rank 0, post it there, and give the same advice to all. Collective. */
static int post(slackwater *run, double time, float *whole, const int *counts, const int *starts)
{
    const float *fields[] = {whole};
    MPI_Gatherv(here[1], n_rows * COLUMNS, MPI_FLOAT, whole, counts, starts, MPI_FLOAT, 0, MPI_COMM_WORLD);
    if (rank == 0)
        slackwater_post_float(run, time, fields, 1, ROWS * COLUMNS);
    int may_stop = slackwater_advise(run) == SLACKWATER_MAY_STOP;
    MPI_Bcast(&may_stop, 1, MPI_INT, 0, MPI_COMM_WORLD);
    return may_stop;
}

/* Rank 0 declares the run; the others keep NULL, on which every call does nothing. */
static slackwater *declare(void)
{
    char error[SLACKWATER_TEXT_BYTES];
    slackwater_settings settings = SLACKWATER_DEFAULTS;
    settings.batch_snapshots = 64; /* as in ../c: this toy is quicker than any disk, so it lets itself be held */
    settings.max_waiting_bytes = 3 * 64 * sizeof(float) * ROWS * COLUMNS;
    settings.hold_seconds = 30.0;
    slackwater *run = rank == 0 ? slackwater_declare(&settings, DECLARATION, error) : NULL;
    if (rank == 0 && run == NULL)
        fprintf(stderr, "going on without a service: %s\n", error);
    return run;
}

int main(int argc, char **argv)
{
    float whole[ROWS * COLUMNS];
    int counts[ROWS], starts[ROWS], may_stop = 0, step = 0;
    double pulse = 0.0, sway = 0.0;
    MPI_Init(&argc, &argv);
    MPI_Comm_rank(MPI_COMM_WORLD, &rank);
    MPI_Comm_size(MPI_COMM_WORLD, &n_ranks);
    if (n_ranks > ROWS)
        MPI_Abort(MPI_COMM_WORLD, 1);
    for (int k = 0; k < n_ranks; k++) {
        starts[k] = ROWS * k / n_ranks * COLUMNS;
        counts[k] = ROWS * (k + 1) / n_ranks * COLUMNS - starts[k];
    }
    first = starts[rank] / COLUMNS;
    n_rows = counts[rank] / COLUMNS;

    slackwater *run = declare();
    for (; step < LONGEST && !may_stop; step++) {
        pulse = wander(pulse, 4.0);
        sway = wander(sway, 4.0);
        advance(pulse, sway);
        if (step % EVERY == 0)
            may_stop = post(run, step * STEP, whole, counts, starts);
    }

    slackwater_state last;
    char error[SLACKWATER_TEXT_BYTES];
    if (slackwater_close(run, &last, error) == SLACKWATER_UNSENT)
        fprintf(stderr, "not all of the run arrived: %s\n", error);
    printf("rank %d: %d steps\n", rank, step);
    if (rank == 0)
        printf("%lld snapshots sent, verdict: %s\n", last.sent_snapshots, last.verdict);
    MPI_Finalize();
    return 0;
}
