/* Feeds damaged answers of a service to what reads them; to be run under a sanitizer.
 *
 *     fuzz_answers N_TRIES SEED
 */
#include "slackwater.c"

static void read_answer(const char *bytes, size_t n)
{
    static wire w; /* without a connection: what is not in the buffer does not come */
    char words[SLACKWATER_TEXT_BYTES];
    answer got = {0, 0, 0, -1, 0.0, {NULL, 0, 0, 0}};
    slackwater run;
    address nowhere = {(char *)"http://127.0.0.1", NULL, NULL, NULL, NULL, NULL};
    memset(&run, 0, sizeof run);
    run.at.url = nowhere.url;
    w.fd = w.cancel_fd = -1;
    w.at = 0;
    w.filled = n < sizeof w.buffer ? n : sizeof w.buffer;
    memcpy(w.buffer, bytes, w.filled);
    if (read_head(&w, &got) == 0)
        (void)read_body(&w, &got);
    if (got.body.at == NULL && n > 0) /* most bytes are no HTTP: read them as JSON as well */
        text_add_bytes(&got.body, bytes, n);
    char *exact = slice(got.body.length > 0 ? got.body.at : "", got.body.length); /* without the slack of a text */
    if (exact == NULL)
        exit(3);
    text_free(&got.body);
    got.body.at = exact;
    explain(&nowhere, &got, words);
    (void)after_answer(&got);
    take_receipt(&run, got.body.at, 1);
    (void)take_resource(&run, got.body.at, words);
    free(run.id);
    free(run.path);
    text_free(&got.body);
}

static const char *const WHOLE[] = {
    "HTTP/1.1 201 Created\r\nContent-Length: 44\r\nRetry-After: 3\r\n\r\n"
    "{\"verdict\": \"settled\", \"advice\": \"may stop\"}",
    "HTTP/1.1 100 Continue\r\n\r\n"
    "HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n5;a=b\r\n{\"id\"\r\n4\r\n:\"\"}\r\n0\r\n\r\n",
    "HTTP/1.0 422 No\nConnection: close\n\n"
    "{\"type\": \"/problems/x\", \"title\": \"t\\u00e9\", \"detail\": \"\\\"d\\\"\"}",
    "{\"id\": \"x\", \"next_sequence\": 0, \"last_time\": -1.5e-3, "
    "\"declaration\": {\"n_points\": 60, \"dtype\": \"float64\", "
    "\"fields\": [{}, {\"a\": [1, \"\\ud83d\"]}]}, \"snapshots_to_go\": {\"estimate\": 5, \"low\": null}}",
};

static unsigned long long state;

static size_t below(size_t n)
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (size_t)(state % n);
}

/* Change, cut, double or overwrite a few places of `bytes`; gives the new length. */
static size_t damage(char *bytes, size_t n, size_t room)
{
    static const char TELLING[] = "\"\\{}[]:,0123456789abcdefu\r\n \x00\x7f\xff-+.eE;";
    for (size_t k = 1 + below(6); k > 0 && n > 1; k--) {
        size_t at = below(n), length = 1 + below(n - at);
        switch (below(4)) {
        case 0:
            bytes[at] = TELLING[below(sizeof TELLING - 1)];
            break;
        case 1:
            n = at + 1;
            break;
        case 2:
            memmove(bytes + at, bytes + at + length, n - at - length);
            n -= length;
            break;
        default:
            length = length < room - n ? length : room - n;
            memmove(bytes + at + length, bytes + at, n - at);
            n += length;
        }
    }
    return n;
}

int main(int argc, char **argv)
{
    if (argc < 3)
        return 2;
    long n_tries = strtol(argv[1], NULL, 10);
    state = strtoull(argv[2], NULL, 10) * 2654435761u + 1;
    for (long k = 0; k < n_tries; k++) {
        const char *whole = WHOLE[below(sizeof WHOLE / sizeof *WHOLE)];
        size_t n = strlen(whole);
        char *bytes = malloc(4 * n); /* of its own, so that a read past the end is seen */
        if (bytes == NULL)
            return 3;
        memcpy(bytes, whole, n);
        n = damage(bytes, n, 4 * n);
        char *exact = slice(bytes, n);
        free(bytes);
        read_answer(exact, n);
        free(exact);
    }
    return 0;
}
