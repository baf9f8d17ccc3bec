/* A small solver that ends itself: a warm and a cold stream meet in a mixing duct, and the run may stop when the two
 * leading modes of the temperature have settled.
 *
 *     make && ./mixing_duct
 *
 * The temperature is carried by a steady flow and diffuses (upwind along the duct, central across it). At the inlet the
 * warm stream pulses and the height at which the two meet sways; both wander about their means with a memory of
 * their own (first-order autoregression), so the record is stationary and its modes can settle.
 */
#include "slackwater.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>

enum { ROWS = 16, COLUMNS = 60, EVERY = 120, LONGEST = 400000 };

static const double SPACING = 0.01, STEP = 0.004, SPEED = 1.0, DIFFUSIVITY = 1.5e-3; /* m, s, m/s, m2/s */

static float temperature[ROWS][COLUMNS]; /* above the cold stream, K */

static const char *DECLARATION =
    "{\"name\": \"mixing duct\", \"n_points\": 960, \"fields\": [{\"name\": \"T\", \"unit\": \"K\"}],"
    " \"grid\": {\"kind\": \"uniform\", \"shape\": [16, 60], \"spacing\": [0.01, 0.01]},"
    " \"time\": {\"unit\": \"s\"}, \"retained_rank\": 12,"
    " \"criterion\": {\"n_modes\": 2, \"max_angle_deg\": 10}}";

/* A number of mean 0 and variance 1, near enough to normal. */
static double draw(void)
{
    double sum = -6.0;
    for (int k = 0; k < 12; k++)
        sum += (double)rand() / ((double)RAND_MAX + 1.0);
    return sum;
}

/* One step of a wandering quantity of mean 0 and variance 1; `memory` is its correlation time in seconds. */
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

static void advance(double pulse, double sway)
{
    static float old[ROWS][COLUMNS];
    for (int j = 0; j < ROWS; j++)
        for (int i = 0; i < COLUMNS; i++)
            old[j][i] = temperature[j][i];
    for (int j = 0; j < ROWS; j++) {
        for (int i = 0; i < COLUMNS; i++) {
            double here = old[j][i], below = old[j > 0 ? j - 1 : 0][i], above = old[j < ROWS - 1 ? j + 1 : j][i];
            double before = i > 0 ? (double)old[j][i - 1] : inlet(j, pulse, sway);
            double carried = -SPEED * (here - before) / SPACING;
            double spread = DIFFUSIVITY * (below - 2.0 * here + above) / (SPACING * SPACING);
            temperature[j][i] = (float)(here + STEP * (carried + spread));
        }
    }
}

int main(void)
{
    char error[SLACKWATER_TEXT_BYTES];
    slackwater_settings settings = SLACKWATER_DEFAULTS;
    /* This toy makes a thousand snapshots in a second. So that the advice does not come late, it sends large batches
     * and lets itself be held while two wait. A solver that takes seconds for a step passes NULL for settings. */
    settings.batch_snapshots = 64;
    settings.max_waiting_bytes = 3 * 64 * sizeof temperature;
    settings.hold_seconds = 30.0;
    slackwater *run = slackwater_declare(&settings, DECLARATION, error);
    if (run == NULL)
        fprintf(stderr, "going on without a service: %s\n", error);

    const float *fields[] = {&temperature[0][0]};
    double pulse = 0.0, sway = 0.0;
    long step = 0;
    for (; step < LONGEST && slackwater_advise(run) == SLACKWATER_CONTINUE; step++) {
        pulse = wander(pulse, 4.0);
        sway = wander(sway, 4.0);
        advance(pulse, sway);
        if (step % EVERY == 0)
            slackwater_post_float(run, (double)step * STEP, fields, 1, ROWS * COLUMNS);
    }

    slackwater_state last;
    int result = slackwater_close(run, &last, error);
    printf("%ld steps, %lld snapshots sent, verdict: %s\n", step, last.sent_snapshots, last.verdict);
    if (result == SLACKWATER_UNSENT)
        fprintf(stderr, "not all of the run arrived: %s\n", error);
    return 0;
}
