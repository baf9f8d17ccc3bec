/* Posts snapshots of a running solver to a Slackwater service and says whether the run may stop.
 *
 *     char error[SLACKWATER_TEXT_BYTES];
 *     slackwater *run = slackwater_declare(NULL, declaration, error);
 *     if (run == NULL) fprintf(stderr, "going on without a service: %s\n", error);
 *     for (long step = 0; step < n_steps; step++) {
 *         advance();
 *         if (step % 20 == 0) slackwater_post_float(run, time, (const float *[]){u, v}, 2, n_points);
 *         if (slackwater_advise(run) == SLACKWATER_MAY_STOP) break;
 *     }
 *     slackwater_close(run, NULL, error);
 *
 * One header, one source, C99 with POSIX.1-2008 sockets and threads: build slackwater.c with -pthread.
 *
 * A post copies the snapshot into a bounded buffer and returns; a background thread sends batches. While the
 * service is away, busy or full, batches wait in memory and are sent again, each under its number, so that nothing is
 * lost and nothing counts twice. Snapshots wait in memory only: when the solver is killed, those not yet sent are
 * gone. A run of NULL is a run without a service: every call on it does nothing and advises to go on, so a solver
 * needs no branches of its own.
 *
 * Calls on one run come from one thread at a time, but for slackwater_advise and slackwater_read_state, which any
 * thread may call until the run is closed or detached.
 *
 * Only plain http is spoken, and the token travels in it: across an open network put an ssh tunnel or a TLS proxy
 * in between.
 *
 * Settled modes mean that the sampling of what was recorded suffices. They say nothing of mesh, time step, turbulence
 * model, or of states that the run has not visited. A simulation may end itself on the advice; a rig is stopped
 * by a person. Never wire the advice to an interlock.
 */
#ifndef SLACKWATER_H
#define SLACKWATER_H

#include <stddef.h>

#ifdef __cplusplus
extern "C" {
#endif

#define SLACKWATER_TEXT_BYTES 512 /* size of every error text, its final zero included */

typedef struct slackwater slackwater;

enum slackwater_advice { SLACKWATER_CONTINUE = 0, SLACKWATER_MAY_STOP = 1 };

enum slackwater_result {
    SLACKWATER_OK = 0,
    SLACKWATER_NO_RUN = 1,    /* the run is NULL: nothing was done */
    SLACKWATER_SKIPPED = 2,   /* the run holds this time already, as after a restart from an older solver state */
    SLACKWATER_MISFIT = 3,    /* fields, points or times are not as declared: nothing was taken */
    SLACKWATER_LOST = 4,      /* no room: the service has been away for too long, this batch is given up */
    SLACKWATER_STOPPED = 5,   /* the service refuses the whole run: nothing more is sent */
    SLACKWATER_REFUSED = 6,   /* the service refused what was sent; the error text says why */
    SLACKWATER_NO_ANSWER = 7, /* the service cannot be reached */
    SLACKWATER_UNSENT = 8     /* at the end: some snapshots were lost or could not be sent in time */
};

/* How to reach the service and how much to hold. Start from SLACKWATER_DEFAULTS; zero or NULL takes the default. */
typedef struct {
    const char *url;          /* default: SLACKWATER_URL in the environment, or http://127.0.0.1:8350 */
    const char *token;        /* default: SLACKWATER_TOKEN in the environment, or none */
    size_t batch_snapshots;   /* snapshots per request, at most 1000; default 8, fewer when they exceed 32 MiB */
    size_t max_waiting_bytes; /* bound on the buffers, at least two batches are held; default 256 MiB */
    double hold_seconds;      /* how long a post may wait for room before its batch is given up; default: never */
    double start_seconds;     /* how long declare and attach go on trying; default 10 */
    double idle_seconds;      /* how long a request may stand still before it is tried again; default 60 */
    double flush_seconds;     /* how long close and detach may take to send the rest; default 60 */
    void (*tell)(void *context, const char *line); /* gets a line when contact is lost, regained or refused, from
                                                      the background thread; default: writes to stderr */
    void *context;
} slackwater_settings;

#define SLACKWATER_DEFAULTS {NULL, NULL, 0, 0, 0.0, 0.0, 0.0, 0.0, NULL, NULL}

/* How far a run has come, as seen from here. */
typedef struct {
    long long sent_snapshots;    /* safe on the disk of the service, posted from here */
    long long waiting_snapshots; /* in memory */
    long long lost_snapshots;    /* refused, or no room in memory */
    long long skipped_snapshots; /* the run held them already */
    long long held_snapshots;    /* what the run held when it was attached */
    long long snapshots_to_go;   /* forecast of the last receipt; -1 when there is none */
    int in_contact;              /* 0 from the first failed try until the next receipt */
    char verdict[16];            /* gathering, unsettled, settled, drifting or inseparable; "" before a receipt */
    char last_error[SLACKWATER_TEXT_BYTES]; /* "" when nothing has failed */
} slackwater_state;

/* Declare a run. `declaration` is the JSON of POST /v1/runs. Gives NULL and the reason in `error` when the service
 * refuses it or cannot be reached within start_seconds. `settings` may be NULL, `error` too. */
slackwater *slackwater_declare(const slackwater_settings *settings, const char *declaration, char *error);

/* Take up a run that exists: batch numbers go on where they ended, and posts whose time the run holds already are
 * skipped. Errors as with slackwater_declare. */
slackwater *slackwater_attach(const slackwater_settings *settings, const char *run_id, char *error);

/* The id of the run, for slackwater_attach and for people; "" when the run is NULL. */
const char *slackwater_run_id(const slackwater *run);

/* Give weights (cell volume or area), n = n_points or n_fields * n_points, before the first post; waits for the
 * answer. */
int slackwater_put_weights(slackwater *run, const double *weights, size_t n, char *error);

/* Give the positions of scattered points, (n_points, n_axes) with the axes of a point together, before the first
 * post; waits for the answer. */
int slackwater_put_positions(slackwater *run, const double *positions, size_t n_points, size_t n_axes, char *error);

/* Post one snapshot: copies it and returns. `fields` points to n_fields arrays of n_points values each, in the
 * declared order; n_fields 1 with n_points = all values takes them from one array. Values are converted to the
 * declared dtype. `time` is in the time unit of the run and increases; NaN at every post lets the declared step hold.
 * Gives OK, NO_RUN, SKIPPED, MISFIT, LOST or STOPPED; a solver may ignore it. */
int slackwater_post_float(slackwater *run, double time, const float *const *fields, size_t n_fields, size_t n_points);
int slackwater_post_double(slackwater *run, double time, const double *const *fields, size_t n_fields, size_t n_points);

/* The advice of the last receipt; CONTINUE before the first one and while out of contact. */
enum slackwater_advice slackwater_advise(slackwater *run);

/* How far the run has come; also says why posts fail. */
void slackwater_read_state(slackwater *run, slackwater_state *state);

/* Send what is left, for at most flush_seconds, and let the run go; it stays open for slackwater_attach. Gives OK,
 * or UNSENT with `error` saying how many snapshots are missing and why. `last`, when not NULL, gets the final state.
 * The run must not be used afterwards. */
int slackwater_detach(slackwater *run, slackwater_state *last, char *error);

/* As slackwater_detach, and tell the service that no more data will come, unless snapshots are missing. */
int slackwater_close(slackwater *run, slackwater_state *last, char *error);

#ifdef __cplusplus
}
#endif

#endif
