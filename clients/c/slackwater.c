/* The client of slackwater.h. One file on purpose, so that it can be dropped into the source tree of a solver.
 *
 * From top to bottom: texts, JSON, addresses, the wire, HTTP, arrays, the waiting batches, the posting thread, and
 * what the header declares. Only the solver's thread touches `filling`, only the posting thread touches `wire` and
 * `sequence`; everything the two share is under `lock`, which is never held during a copy of a snapshot or a call
 * to the network.
 */
#define _POSIX_C_SOURCE 200809L

#include "slackwater.h"

#include <errno.h>
#include <fcntl.h>
#include <netdb.h>
#include <netinet/in.h>
#include <netinet/tcp.h>
#include <poll.h>
#include <pthread.h>
#include <signal.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>
#include <sys/socket.h>
#include <time.h>
#include <unistd.h>

enum {
    DEFAULT_BATCH = 8,
    MAX_BATCH = 1000,                     /* the time of each snapshot goes into the address, about 30 bytes each */
    DEFAULT_BATCH_BYTES = 32 << 20,       /* a second of an ordinary network */
    DEFAULT_WAITING_BYTES = 256 << 20,    /* a restart of the service lasts seconds; small beside a solver */
    MAX_SPARES = 2,                       /* one for the solver to fill next, one just sent */
    NPY_HEAD_BYTES = 128,                 /* as numpy pads it, and enough for all counts that take_resource lets in */
    WIRE_BYTES = 16 << 10,                /* longest head of an answer that is read */
    PIECE_BYTES = 1 << 20,                /* sent between two looks for an early answer */
    EXPECT_BYTES = 64 << 10,              /* larger bodies wait for "100 Continue" */
    MAX_ANSWER_BYTES = 128 << 20,         /* a run with three axes of a million numbers is about 60 MB of text */
    MAX_DEPTH = 64                        /* nesting of JSON that is read */
};

static const double CONNECT_SECONDS = 5.0;     /* a service in reach accepts at once */
static const double EXPECT_SECONDS = 2.0;      /* then the body is sent unasked, as RFC 9110 10.1.1 allows */
static const double FIRST_PAUSE_SECONDS = 0.2; /* about a restart of the service at its best */
static const double LONGEST_PAUSE_SECONDS = 10.0;
static const double LONGEST_RETRY_AFTER_SECONDS = 3600.0; /* a service that asks for more is taken for gone */
static const double ANOTHER_MOMENT_SECONDS = 1.0;         /* for the thread to end after the flush */
static const double CLOSE_SECONDS = 15.0;                 /* the service takes up to 10 to give its final verdict */
static const double RESUME_MARGIN_FRACTION = 1e-9;        /* above rounding of summed steps, below any real step */
static const double LONGEST_SETTING_SECONDS = 86400.0;

/* ---- texts ---------------------------------------------------------------------------------------------- */

typedef struct {
    char *at;
    size_t length, room;
    int failed; /* out of memory; whoever uses the text looks here first */
} text;

static void text_reserve(text *t, size_t more)
{
    if (t->failed || t->room - t->length > more)
        return;
    size_t room = 2 * t->room + more + 64;
    char *grown = realloc(t->at, room);
    if (grown == NULL) {
        t->failed = 1;
        return;
    }
    t->at = grown;
    t->room = room;
}

static void text_add_bytes(text *t, const char *bytes, size_t n)
{
    text_reserve(t, n);
    if (t->failed)
        return;
    memcpy(t->at + t->length, bytes, n);
    t->length += n;
    t->at[t->length] = '\0';
}

static void text_add(text *t, const char *words)
{
    text_add_bytes(t, words, strlen(words));
}

static void text_free(text *t)
{
    free(t->at);
    *t = (text){NULL, 0, 0, 0};
}

static char *copy_of(const char *words)
{
    size_t n = strlen(words) + 1;
    char *copy = malloc(n);
    if (copy != NULL)
        memcpy(copy, words, n);
    return copy;
}

#if defined(__GNUC__)
__attribute__((format(printf, 2, 3)))
#endif
static void say(char *error, const char *format, ...)
{
    va_list arguments;
    if (error == NULL)
        return;
    va_start(arguments, format);
    (void)vsnprintf(error, SLACKWATER_TEXT_BYTES, format, arguments);
    va_end(arguments);
}

/* A printed number without '+', which an address would turn into a space, and with a plain decimal point. */
static void text_add_printed(text *t, const char *printed)
{
    char plain[64];
    size_t n = 0;
    for (const char *c = printed; *c != '\0' && n < sizeof plain; c++) {
        if (strchr("0123456789-e", *c) != NULL)
            plain[n++] = *c;
        else if (*c != '+' && (n == 0 || plain[n - 1] != '.'))
            plain[n++] = '.'; /* a decimal point of several bytes, as some locales have it, becomes one */
    }
    text_add_bytes(t, plain, n);
}

/* A float64 that reads back equal, whatever the locale of the solver. */
static void text_add_number(text *t, double value)
{
    char printed[64];
    (void)snprintf(printed, sizeof printed, "%.17g", value);
    text_add_printed(t, printed);
}

/* One segment of a path, percent-encoded (RFC 3986). */
static void text_add_segment(text *t, const char *segment)
{
    for (const char *c = segment; *c != '\0'; c++) {
        char code[4];
        if (strchr("ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-._~", *c) != NULL) {
            text_add_bytes(t, c, 1);
        } else {
            (void)snprintf(code, sizeof code, "%%%02X", (unsigned)(unsigned char)*c);
            text_add(t, code);
        }
    }
}

static double now_seconds(void)
{
    struct timespec t;
    (void)clock_gettime(CLOCK_MONOTONIC, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static struct timespec at_seconds(double moment)
{
    struct timespec t;
    t.tv_sec = (time_t)moment;
    t.tv_nsec = (long)(1e9 * (moment - (double)t.tv_sec));
    return t;
}

/* ---- JSON (RFC 8259), read where it lies: enough to find members of the service's answers -------------------- */

static const char *json_space(const char *c)
{
    while (*c == ' ' || *c == '\t' || *c == '\n' || *c == '\r')
        c++;
    return c;
}

static const char *json_string_end(const char *c)
{
    for (c++; *c != '\0'; c++) {
        if (*c == '"')
            return c + 1;
        if (*c == '\\' && *++c == '\0')
            return NULL;
    }
    return NULL;
}

static const char *json_end(const char *c, int depth);

/* The end of an array or object; NULL when it is broken. */
static const char *json_list_end(const char *c, int depth)
{
    char open = *c, shut = open == '{' ? '}' : ']';
    c = json_space(c + 1);
    if (*c == shut)
        return c + 1;
    for (;;) {
        if (open == '{') {
            if (*c != '"' || (c = json_string_end(c)) == NULL || *(c = json_space(c)) != ':')
                return NULL;
            c = json_space(c + 1);
        }
        if ((c = json_end(c, depth + 1)) == NULL)
            return NULL;
        c = json_space(c);
        if (*c == shut)
            return c + 1;
        if (*c != ',')
            return NULL;
        c = json_space(c + 1);
    }
}

/* The end of the value that starts at `c`; NULL when it is broken or nested too deeply. */
static const char *json_end(const char *c, int depth)
{
    if (depth > MAX_DEPTH)
        return NULL;
    if (*c == '"')
        return json_string_end(c);
    if (*c == '{' || *c == '[')
        return json_list_end(c, depth);
    size_t n = strcspn(c, ",]} \t\r\n");
    return n == 0 ? NULL : c + n;
}

/* The value of a member, or NULL when there is none; `object` may be NULL. Names are compared as they are written. */
static const char *json_member(const char *object, const char *name)
{
    size_t n = strlen(name);
    if (object == NULL || *(object = json_space(object)) != '{')
        return NULL;
    const char *c = json_space(object + 1);
    while (*c == '"') {
        const char *key = c + 1, *end = json_string_end(c);
        if (end == NULL || *(c = json_space(end)) != ':')
            return NULL;
        c = json_space(c + 1);
        if ((size_t)(end - key) == n + 1 && memcmp(key, name, n) == 0)
            return json_end(c, 0) == NULL ? NULL : c;
        if ((c = json_end(c, 0)) == NULL || *(c = json_space(c)) != ',')
            return NULL;
        c = json_space(c + 1);
    }
    return NULL;
}

/* Number of elements of an array; 0 for anything else. */
static size_t json_count(const char *array)
{
    size_t n = 0;
    if (array == NULL || *array != '[')
        return 0;
    const char *c = json_space(array + 1);
    while (*c != ']') {
        if ((c = json_end(c, 0)) == NULL)
            return 0;
        n++;
        c = json_space(c);
        if (*c == ',')
            c = json_space(c + 1);
        else if (*c != ']')
            return 0;
    }
    return n;
}

static long long json_integer(const char *value, long long otherwise)
{
    char *end;
    if (value == NULL || (*value != '-' && (*value < '0' || *value > '9')))
        return otherwise;
    errno = 0;
    long long number = strtoll(value, &end, 10);
    return errno == 0 && end != value && *end != '.' && *end != 'e' && *end != 'E' ? number : otherwise;
}

/* A number to about 15 digits, whatever the locale; 0 in `known` when the value is none. */
static double json_number(const char *c, int *known)
{
    double value = 0.0, sign = 1.0;
    int power = 0, seen = 0;
    *known = 0;
    if (c == NULL)
        return 0.0;
    if (*c == '-') {
        sign = -1.0;
        c++;
    }
    for (; (*c >= '0' && *c <= '9') || (*c == '.' && seen == 0); c++) {
        if (*c == '.') {
            seen = 1;
            continue;
        }
        value = 10.0 * value + (double)(*c - '0');
        power -= seen;
        *known = 1;
    }
    if (*c == 'e' || *c == 'E') {
        long exponent = strtol(c + 1, NULL, 10);
        power += exponent > 400 ? 400 : exponent < -400 ? -400 : (int)exponent;
    }
    for (; power > 0; power--)
        value *= 10.0;
    for (; power < 0; power++)
        value /= 10.0;
    return sign * value;
}

static int hex_digit(char c)
{
    const char *digits = "0123456789abcdef", *found;
    char low = c >= 'A' && c <= 'F' ? (char)(c - 'A' + 'a') : c;
    return low != '\0' && (found = strchr(digits, low)) != NULL ? (int)(found - digits) : -1;
}

/* Decode \uXXXX at `c` into UTF-8; the number of bytes written. Halves of surrogate pairs become '?'. */
static size_t json_escape(const char *c, char *out)
{
    unsigned code = 0;
    for (int k = 2; k < 6; k++) {
        int digit = hex_digit(c[k]);
        if (digit < 0)
            return 0;
        code = 16 * code + (unsigned)digit;
    }
    if (code >= 0xd800 && code < 0xe000)
        code = '?';
    if (code < 0x80) {
        out[0] = (char)code;
        return 1;
    }
    if (code < 0x800) {
        out[0] = (char)(0xc0 | (code >> 6));
        out[1] = (char)(0x80 | (code & 0x3f));
        return 2;
    }
    out[0] = (char)(0xe0 | (code >> 12));
    out[1] = (char)(0x80 | ((code >> 6) & 0x3f));
    out[2] = (char)(0x80 | (code & 0x3f));
    return 3;
}

/* Copy a string value into `out`, cut to its room, control characters as spaces; 0 when the value is no string. */
static int json_words(const char *value, char *out, size_t room)
{
    size_t n = 0;
    out[0] = '\0';
    if (value == NULL || *value != '"' || json_string_end(value) == NULL)
        return 0;
    for (const char *c = value + 1; *c != '"' && n + 4 < room; c++) {
        size_t first = n;
        if (*c == '\\' && c[1] == 'u') {
            n += json_escape(c, out + n);
            c += n > first ? 5 : 1;
        } else if (*c == '\\') {
            c++;
            out[n++] = strchr("nrtbf", *c) != NULL ? ' ' : *c;
        } else {
            out[n++] = *c;
        }
        if (n > first && ((unsigned char)out[first] < 0x20 || out[first] == 0x7f))
            out[first] = ' ';
    }
    out[n] = '\0';
    return 1;
}

/* ---- addresses ------------------------------------------------------------------------------------------ */

typedef struct {
    char *url;    /* as given, for messages */
    char *host;   /* a name or a number, without brackets */
    char *port;
    char *header; /* value of Host */
    char *prefix; /* path before /v1, "" as a rule */
    char *token;  /* or NULL */
} address;

static void address_free(address *a)
{
    free(a->url);
    free(a->host);
    free(a->port);
    free(a->header);
    free(a->prefix);
    free(a->token);
    *a = (address){NULL, NULL, NULL, NULL, NULL, NULL};
}

static char *slice(const char *from, size_t n)
{
    char *copy = malloc(n + 1);
    if (copy != NULL) {
        memcpy(copy, from, n);
        copy[n] = '\0';
    }
    return copy;
}

/* Neither blanks nor control characters, so that nothing given can add a line to a request. */
static int is_plain(const char *words)
{
    for (; *words != '\0'; words++)
        if ((unsigned char)*words <= 0x20 || *words == 0x7f)
            return 0;
    return 1;
}

/* Split host and port out of "host:port" or "[host]:port", n bytes long; 0 when it is neither. */
static int address_split(address *a, const char *authority, size_t n)
{
    const char *host = authority, *end = authority + n, *colon;
    size_t host_bytes;
    if (*authority == '[') {
        const char *shut = memchr(authority, ']', n);
        if (shut == NULL)
            return 0;
        host = authority + 1;
        host_bytes = (size_t)(shut - host);
        colon = shut + 1;
    } else {
        colon = memchr(authority, ':', n);
        colon = colon == NULL ? end : colon;
        host_bytes = (size_t)(colon - host);
    }
    if (host_bytes == 0 || (colon < end && *colon != ':'))
        return 0;
    a->host = slice(host, host_bytes);
    a->port = colon + 1 < end ? slice(colon + 1, (size_t)(end - colon - 1)) : copy_of("80");
    a->header = slice(authority, n);
    return a->port != NULL && strspn(a->port, "0123456789") == strlen(a->port);
}

static int address_parse(address *a, const char *url, const char *token, char *error)
{
    if (strncmp(url, "https://", 8) == 0) {
        say(error, "%s: this client speaks plain http only; put a TLS proxy or an ssh tunnel in between", url);
        return SLACKWATER_REFUSED;
    }
    const char *rest = url + 7;
    size_t n = strncmp(url, "http://", 7) == 0 ? strcspn(rest, "/") : 0;
    if (n == 0 || !is_plain(url) || !address_split(a, rest, n)) {
        say(error, "\"%s\" is no address of a service; it should look like http://127.0.0.1:8350", url);
        return SLACKWATER_REFUSED;
    }
    if (token != NULL && !is_plain(token)) {
        say(error, "the token holds blanks or control characters");
        return SLACKWATER_REFUSED;
    }
    size_t prefix = strlen(rest + n);
    while (prefix > 0 && rest[n + prefix - 1] == '/')
        prefix--;
    a->url = copy_of(url);
    a->prefix = slice(rest + n, prefix);
    a->token = token == NULL ? NULL : copy_of(token);
    if (a->host == NULL || a->header == NULL || a->url == NULL || a->prefix == NULL || (token && a->token == NULL)) {
        say(error, "out of memory");
        return SLACKWATER_REFUSED;
    }
    return SLACKWATER_OK;
}

/* ---- the wire: one connection, never blocking for longer than idle_seconds ---------------------------------- */

typedef struct {
    int fd;        /* -1 when there is no connection */
    int cancel_fd; /* becomes readable when the caller gives up */
    int cancelled;
    int reused;    /* the connection has served a request before */
    double idle_seconds;
    size_t at, filled; /* what has been received and not yet read is buffer[at .. filled) */
    char buffer[WIRE_BYTES];
} wire;

static void wire_shut(wire *w)
{
    if (w->fd >= 0)
        (void)close(w->fd);
    w->fd = -1;
    w->at = w->filled = 0;
    w->reused = 0;
}

/* What of `events` has come within `seconds`; 0 when nothing has, or the caller gave up. */
static short wire_wait(wire *w, short events, double seconds)
{
    double deadline = now_seconds() + seconds;
    for (;;) {
        struct pollfd watched[2] = {{w->fd, events, 0}, {w->cancel_fd, POLLIN, 0}};
        double left = deadline - now_seconds();
        int ready = poll(watched, 2, left > 0.0 ? (int)(1e3 * left) + 1 : 0);
        if (ready < 0 && errno == EINTR)
            continue;
        if (ready > 0 && watched[1].revents != 0) {
            w->cancelled = 1;
            return 0;
        }
        return ready > 0 ? watched[0].revents : 0;
    }
}

static int make_unblocking(int fd)
{
    int flags = fcntl(fd, F_GETFL);
    return flags < 0 || fcntl(fd, F_SETFL, flags | O_NONBLOCK) < 0 || fcntl(fd, F_SETFD, FD_CLOEXEC) < 0 ? -1 : 0;
}

/* Try one address; 0, or the error number. */
static int wire_connect(wire *w, const struct addrinfo *to)
{
    int yes = 1, why = 0;
    socklen_t size = sizeof why;
    w->fd = socket(to->ai_family, to->ai_socktype, to->ai_protocol);
    if (w->fd < 0)
        return errno;
    if (make_unblocking(w->fd) < 0)
        return errno;
    (void)setsockopt(w->fd, IPPROTO_TCP, TCP_NODELAY, &yes, sizeof yes);
    if (connect(w->fd, to->ai_addr, to->ai_addrlen) == 0)
        return 0;
    if (errno != EINPROGRESS && errno != EINTR)
        return errno;
    if (wire_wait(w, POLLOUT, CONNECT_SECONDS) == 0)
        return ETIMEDOUT;
    return getsockopt(w->fd, SOL_SOCKET, SO_ERROR, &why, &size) < 0 ? errno : why;
}

/* Connect; 0, or -1 with the reason. The name is looked up each time, since a service may move. */
static int wire_open(wire *w, const address *a, char *error)
{
    struct addrinfo hints, *found = NULL;
    memset(&hints, 0, sizeof hints);
    hints.ai_socktype = SOCK_STREAM;
    wire_shut(w);
    int failed = getaddrinfo(a->host, a->port, &hints, &found), why = 0;
    if (failed != 0) {
        say(error, "no answer from %s: %s", a->url, gai_strerror(failed));
        return -1;
    }
    for (struct addrinfo *to = found; to != NULL; to = to->ai_next) {
        why = wire_connect(w, to);
        if (why == 0)
            break;
        wire_shut(w);
    }
    freeaddrinfo(found);
    if (w->fd >= 0)
        return 0;
    say(error, "no answer from %s: %s; is the service running there?", a->url, strerror(why));
    return -1;
}

enum sending { SENT, EARLY, BROKEN };

/* Send `n` bytes from `*done` on; stops with EARLY as soon as something comes back. */
static enum sending wire_send(wire *w, const char *bytes, size_t n, size_t *done)
{
    while (*done < n) {
        size_t piece = n - *done < PIECE_BYTES ? n - *done : PIECE_BYTES;
        ssize_t sent = send(w->fd, bytes + *done, piece, MSG_NOSIGNAL);
        if (sent >= 0) {
            *done += (size_t)sent;
        } else if (errno == EAGAIN || errno == EWOULDBLOCK) {
            short ready = wire_wait(w, POLLIN | POLLOUT, w->idle_seconds);
            if (ready == 0)
                return BROKEN;
            if ((ready & POLLIN) != 0)
                return EARLY;
        } else if (errno != EINTR) {
            return BROKEN;
        }
    }
    return SENT;
}

/* Receive some bytes into the empty buffer; how many, 0 at the end, -1 when nothing came. */
static ssize_t wire_fill(wire *w)
{
    for (;;) {
        ssize_t got = recv(w->fd, w->buffer, sizeof w->buffer, 0);
        if (got >= 0) {
            w->at = 0;
            w->filled = (size_t)got;
            return got;
        }
        if (errno == EAGAIN || errno == EWOULDBLOCK) {
            if (wire_wait(w, POLLIN, w->idle_seconds) == 0)
                return -1;
        } else if (errno != EINTR) {
            return -1;
        }
    }
}

/* Read up to a line feed, which is left out, and so is a carriage return before it; 0, or -1. */
static int wire_line(wire *w, char *line, size_t room)
{
    size_t n = 0;
    for (;;) {
        if (w->at == w->filled && wire_fill(w) <= 0)
            return -1;
        char c = w->buffer[w->at++];
        if (c == '\n')
            break;
        if (n + 1 >= room)
            return -1;
        line[n++] = c;
    }
    if (n > 0 && line[n - 1] == '\r')
        n--;
    line[n] = '\0';
    return 0;
}

/* Read `n` bytes into `t`; 0, or -1. */
static int wire_read(wire *w, size_t n, text *t)
{
    while (n > 0) {
        if (w->at == w->filled && wire_fill(w) <= 0)
            return -1;
        size_t piece = w->filled - w->at < n ? w->filled - w->at : n;
        text_add_bytes(t, w->buffer + w->at, piece);
        w->at += piece;
        n -= piece;
        if (t->failed || t->length > MAX_ANSWER_BYTES)
            return -1;
    }
    return 0;
}

/* ---- HTTP/1.1 (RFC 9112) -------------------------------------------------------------------------------- */

typedef struct {
    const char *method;
    const char *target;
    const char *type; /* of the body; NULL when there is none */
    const char *body;
    size_t n_bytes;
} request;

typedef struct {
    int status;
    int keeps;        /* the connection may be used again */
    int chunked;
    long long length; /* -1 when not given */
    double retry_after_seconds;
    text body;
} answer;

/* What has become of a request. */
enum fate {
    ANSWERED,
    NOT_SENT, /* no connection: the service cannot have taken it */
    UNKNOWN,  /* cut off, or nothing came back in time */
    GIVEN_UP  /* by the caller */
};

static void read_field(answer *got, const char *line)
{
    const char *colon = strchr(line, ':');
    if (colon == NULL)
        return;
    const char *value = colon + 1 + strspn(colon + 1, " \t");
    size_t n = (size_t)(colon - line);
    int known;
    if (n == 14 && strncasecmp(line, "content-length", n) == 0) {
        got->length = json_integer(value, -1);
    } else if (n == 17 && strncasecmp(line, "transfer-encoding", n) == 0) {
        got->chunked = strncasecmp(value, "chunked", 7) == 0;
    } else if (n == 10 && strncasecmp(line, "connection", n) == 0) {
        got->keeps = strncasecmp(value, "close", 5) != 0;
    } else if (n == 11 && strncasecmp(line, "retry-after", n) == 0) {
        double seconds = json_number(value, &known); /* a date counts as 0: the pause between tries is kept anyway */
        seconds = seconds < LONGEST_RETRY_AFTER_SECONDS ? seconds : LONGEST_RETRY_AFTER_SECONDS;
        got->retry_after_seconds = seconds > 0.0 ? seconds : 0.0;
    }
}

/* Read status and fields, of an interim answer too; 0, or -1 when they do not come or are no HTTP/1. */
static int read_head(wire *w, answer *got)
{
    char line[WIRE_BYTES / 2];
    if (wire_line(w, line, sizeof line) < 0)
        return -1;
    if (strncmp(line, "HTTP/1.", 7) != 0 || strlen(line) < 12 || line[8] != ' ')
        return -1;
    *got = (answer){(int)json_integer(line + 9, -1), line[7] != '0', 0, -1, 0.0, got->body};
    if (got->status < 100 || got->status > 599)
        return -1;
    for (int fields = 0; fields < 100; fields++) {
        if (wire_line(w, line, sizeof line) < 0)
            return -1;
        if (line[0] == '\0')
            return 0;
        read_field(got, line);
    }
    return -1;
}

static int read_chunks(wire *w, text *body)
{
    char line[256];
    for (;;) {
        size_t n = 0;
        const char *c = line;
        if (wire_line(w, line, sizeof line) < 0)
            return -1;
        for (; hex_digit(*c) >= 0; c++)
            if ((n = 16 * n + (size_t)hex_digit(*c)) > MAX_ANSWER_BYTES)
                return -1;
        if (c == line)
            return -1;
        if (n == 0)
            break;
        if (wire_read(w, n, body) < 0 || wire_line(w, line, sizeof line) < 0 || line[0] != '\0')
            return -1;
    }
    do { /* trailer fields say nothing that is needed */
        if (wire_line(w, line, sizeof line) < 0)
            return -1;
    } while (line[0] != '\0');
    return 0;
}

static int read_body(wire *w, answer *got)
{
    if (got->status == 204 || got->status == 304)
        return 0;
    if (got->chunked)
        return read_chunks(w, &got->body);
    if (got->length >= 0)
        return got->length > MAX_ANSWER_BYTES ? -1 : wire_read(w, (size_t)got->length, &got->body);
    got->keeps = 0;
    for (;;) { /* without a length it ends with the connection */
        if (w->at == w->filled) {
            ssize_t came = wire_fill(w);
            if (came <= 0)
                return came < 0 ? -1 : 0;
        }
        if (wire_read(w, w->filled - w->at, &got->body) < 0)
            return -1;
    }
}

static void write_head(text *head, const address *a, const request *r)
{
    char length[64];
    text_add(head, r->method);
    text_add(head, " ");
    text_add(head, a->prefix);
    text_add(head, r->target);
    text_add(head, " HTTP/1.1\r\nHost: ");
    text_add(head, a->header);
    text_add(head, "\r\nUser-Agent: slackwater-c\r\nAccept: application/json\r\n");
    if (a->token != NULL) {
        text_add(head, "Authorization: Bearer ");
        text_add(head, a->token);
        text_add(head, "\r\n");
    }
    if (r->type != NULL) {
        text_add(head, "Content-Type: ");
        text_add(head, r->type);
        text_add(head, "\r\n");
    }
    (void)snprintf(length, sizeof length, "Content-Length: %zu\r\n", r->n_bytes);
    text_add(head, length);
    if (r->n_bytes >= EXPECT_BYTES)
        text_add(head, "Expect: 100-continue\r\n");
    text_add(head, "\r\n");
}

/* Send the body, unless the answer comes first. Gives 1 when the final head has been read on the way, 0 when it is
 * still to come, -1 when nothing can be said. `*whole` tells whether all of the body went out. */
static int send_body(wire *w, const request *r, answer *got, int *whole)
{
    size_t done = 0;
    *whole = 0;
    if (r->n_bytes >= EXPECT_BYTES && (wire_wait(w, POLLIN, EXPECT_SECONDS) & POLLIN) != 0) {
        if (read_head(w, got) < 0)
            return -1;
        if (got->status >= 200)
            return 1;
    }
    for (;;) {
        enum sending sent = w->cancelled ? BROKEN : wire_send(w, r->body, r->n_bytes, &done);
        if (sent == SENT) {
            *whole = 1;
            return 0;
        }
        if (w->cancelled || read_head(w, got) < 0) /* a refusal may lie there although the way out is cut */
            return -1;
        if (got->status >= 200)
            return 1;
        if (sent == BROKEN)
            return -1;
    }
}

/* One request over an open connection. */
static enum fate exchange_over(wire *w, const char *head, size_t n_head, const request *r, answer *got)
{
    size_t done = 0;
    int whole, interim = 0;
    enum sending sent = wire_send(w, head, n_head, &done);
    if (sent == BROKEN)
        return UNKNOWN;
    int known = sent == EARLY ? 0 : send_body(w, r, got, &whole);
    whole = sent == SENT && whole;
    while (known == 0) {
        if (read_head(w, got) < 0 || interim++ > 8)
            return UNKNOWN;
        known = got->status >= 200;
    }
    if (known < 0 || read_body(w, got) < 0 || got->body.failed)
        return UNKNOWN;
    got->keeps = got->keeps && whole;
    return ANSWERED;
}

/* One request, with one more try at once when the service had closed an idle connection. A request that may not be
 * sent twice must come on a fresh wire. */
static enum fate exchange(wire *w, const address *a, const request *r, answer *got, char *error)
{
    text head = {NULL, 0, 0, 0};
    enum fate fate = NOT_SENT;
    write_head(&head, a, r);
    *got = (answer){0, 0, 0, -1, 0.0, {NULL, 0, 0, 0}};
    if (head.failed)
        say(error, "out of memory");
    for (int again = 1; again && !head.failed;) {
        again = w->fd >= 0 && w->reused;
        if (w->fd < 0 && wire_open(w, a, error) < 0)
            break;
        fate = exchange_over(w, head.at, head.length, r, got);
        if (fate == ANSWERED) {
            w->reused = 1;
            if (!got->keeps)
                wire_shut(w);
            break;
        }
        say(error, "no answer from %s: the connection was cut or stood still; was the service stopped?", a->url);
        wire_shut(w);
        text_free(&got->body);
        again = again && !w->cancelled;
    }
    text_free(&head);
    return w->cancelled ? GIVEN_UP : fate;
}

/* The reason of a refusal, from its problem document (RFC 9457) when there is one. */
static void explain(const address *a, const answer *got, char *error)
{
    char title[128], detail[SLACKWATER_TEXT_BYTES];
    if (!json_words(json_member(got->body.at, "title"), title, sizeof title)) {
        say(error, "%s answered with status %d; is it a Slackwater service?", a->url, got->status);
        return;
    }
    (void)json_words(json_member(got->body.at, "detail"), detail, sizeof detail);
    say(error, "%s (%d): %.350s", title, got->status, detail);
}

enum next { DONE, AGAIN, SKIP, STOP };

/* What an answer means for the request: sending damaged or early ones again helps, sending wrong ones does not. */
static enum next after_answer(const answer *got)
{
    char type[64];
    int s = got->status;
    (void)json_words(json_member(got->body.at, "type"), type, sizeof type);
    if (s >= 200 && s < 300)
        return DONE;
    if (s == 408 || s == 429 || s >= 500)
        return AGAIN;
    if (strcmp(type, "/problems/torn-body") == 0 || strcmp(type, "/problems/digest-mismatch") == 0)
        return AGAIN;
    return s == 400 || s == 411 || s == 413 || s == 415 || s == 422 ? SKIP : STOP;
}

/* ---- arrays: NPY 1.0 (NumPy enhancement proposal 1) ------------------------------------------------------------ */

/* Write the head of an array (counts[0], ..., counts[axes - 1]) of 4 or 8 byte floats of this machine. */
static void npy_head(char *out, size_t value_bytes, const size_t *counts, size_t axes)
{
    const unsigned short probe = 1;
    char order = *(const unsigned char *)&probe == 1 ? '<' : '>', shape[80];
    size_t n = 0;
    for (size_t k = 0; k < axes; k++)
        n += (size_t)snprintf(shape + n, sizeof shape - n, "%zu, ", counts[k]);
    shape[axes == 1 ? n - 1 : n - 2] = '\0';
    memset(out, ' ', NPY_HEAD_BYTES);
    memcpy(out, "\x93NUMPY\x01\x00", 8);
    out[8] = (char)(NPY_HEAD_BYTES - 10);
    out[9] = 0;
    int used = snprintf(out + 10, NPY_HEAD_BYTES - 10, "{'descr': '%cf%zu', 'fortran_order': False, 'shape': (%s), }",
                        order, value_bytes, shape);
    out[used < NPY_HEAD_BYTES - 11 ? 10 + used : NPY_HEAD_BYTES - 2] = ' '; /* over the final zero */
    out[NPY_HEAD_BYTES - 1] = '\n';
}

/* ---- batches -------------------------------------------------------------------------------------------- */

typedef struct batch {
    struct batch *next;
    size_t n;      /* snapshots in it */
    int timed;     /* whether they come with times */
    double *times; /* (batch_snapshots) */
    char *bytes;   /* room for the NPY head, then (batch_snapshots, n_fields, n_points) values */
} batch;

struct slackwater {
    address at;
    char *id;
    char *path; /* /v1/runs/{id} */
    size_t n_fields, n_points, value_bytes;
    size_t batch_snapshots, max_batches;
    double hold_seconds, idle_seconds, flush_seconds;
    void (*tell)(void *context, const char *line);
    void *context;

    batch *filling;
    int timed; /* whether posts come with times; -1 before the first */
    double last_time;
    int resumes;
    double resume_after; /* posts up to this time are held already */

    pthread_mutex_t lock;
    pthread_cond_t changed;
    batch *first, *last; /* waiting, the one being sent included */
    batch *spares;
    size_t n_spares, n_batches; /* n_batches counts all there are: filling, waiting, spare and in the making */
    size_t n_filling;           /* snapshots in `filling` */
    slackwater_state state;
    enum slackwater_advice advice;
    int preparing, stopped, ending, ended, abandoned;

    pthread_t thread;
    wire wire;
    long long sequence;
    unsigned long long dice;
    int cancel[2];
};

static size_t snapshot_bytes(const slackwater *run)
{
    return run->n_fields * run->n_points * run->value_bytes;
}

static void batch_free(batch *b)
{
    if (b == NULL)
        return;
    free(b->times);
    free(b->bytes);
    free(b);
}

static batch *batch_make(const slackwater *run)
{
    batch *b = calloc(1, sizeof *b);
    if (b == NULL)
        return NULL;
    b->times = malloc(run->batch_snapshots * sizeof *b->times);
    b->bytes = malloc(NPY_HEAD_BYTES + run->batch_snapshots * snapshot_bytes(run));
    if (b->times != NULL && b->bytes != NULL)
        return b;
    batch_free(b);
    return NULL;
}

/* Touch all memory of a batch, so that the solver's copy does not pay for its first use. */
static batch *batch_warm(const slackwater *run, batch *b)
{
    if (b != NULL)
        memset(b->bytes, 0, NPY_HEAD_BYTES + run->batch_snapshots * snapshot_bytes(run));
    return b;
}

static void batches_free(batch *b)
{
    while (b != NULL) {
        batch *next = b->next;
        batch_free(b);
        b = next;
    }
}

/* Take a batch to fill: a spare one, a new one, or NULL when all there may be are waiting. Under the lock. */
static batch *take_spare(slackwater *run)
{
    batch *b = run->spares;
    if (b != NULL) {
        run->spares = b->next;
        run->n_spares--;
    } else if (run->n_batches < run->max_batches && (b = batch_make(run)) != NULL) {
        run->n_batches++;
    }
    if (b != NULL) {
        b->next = NULL;
        b->n = 0;
    }
    return b;
}

/* Keep an emptied batch for the solver, or free it when enough are kept. Under the lock. */
static void keep_spare(slackwater *run, batch *b)
{
    if (run->n_spares >= MAX_SPARES) {
        run->n_batches--;
        batch_free(b);
        return;
    }
    b->next = run->spares;
    run->spares = b;
    run->n_spares++;
}

static void append_waiting(slackwater *run, batch *b)
{
    if (run->last == NULL)
        run->first = b;
    else
        run->last->next = b;
    run->last = b;
    run->state.waiting_snapshots += (long long)b->n;
}

static batch *remove_waiting(slackwater *run)
{
    batch *b = run->first;
    run->first = b->next;
    if (run->first == NULL)
        run->last = NULL;
    run->state.waiting_snapshots -= (long long)b->n;
    return b;
}

/* ---- the posting thread --------------------------------------------------------------------------------- */

static void tell_stderr(void *context, const char *line)
{
    (void)context;
    (void)fprintf(stderr, "slackwater: %s\n", line);
}

#if defined(__GNUC__)
__attribute__((format(printf, 2, 3)))
#endif
static void tell(slackwater *run, const char *format, ...)
{
    char line[SLACKWATER_TEXT_BYTES + 160];
    va_list arguments;
    va_start(arguments, format);
    (void)vsnprintf(line, sizeof line, format, arguments);
    va_end(arguments);
    run->tell(run->context, line);
}

/* A number in [0, 1) (xorshift64*, Vigna 2016); it only spreads pauses. */
static double draw(slackwater *run)
{
    run->dice ^= run->dice >> 12;
    run->dice ^= run->dice << 25;
    run->dice ^= run->dice >> 27;
    return (double)((run->dice * 0x2545f4914f6cdd1dULL) >> 11) * 0x1p-53;
}

/* Pause before the next try: drawn from the whole range up to a limit that doubles ("full jitter", Brooker,
 * "Exponential backoff and jitter", 2015), on top of what the service asked for. */
static double pause_seconds(slackwater *run, int attempt, double retry_after_seconds)
{
    double limit = FIRST_PAUSE_SECONDS;
    for (int k = 0; k < attempt && limit < LONGEST_PAUSE_SECONDS; k++)
        limit *= 2.0;
    return retry_after_seconds + draw(run) * (limit < LONGEST_PAUSE_SECONDS ? limit : LONGEST_PAUSE_SECONDS);
}

static void batch_target(const slackwater *run, const batch *b, text *target)
{
    char number[64];
    (void)snprintf(number, sizeof number, "/batches/%lld", run->sequence);
    text_add(target, run->path);
    text_add(target, number);
    for (size_t k = 0; b->timed && k < b->n; k++) {
        text_add(target, k == 0 ? "?time=" : "&time=");
        text_add_number(target, b->times[k]);
    }
}

static enum fate send_batch(slackwater *run, batch *b, answer *got, char *error)
{
    const size_t counts[3] = {b->n, run->n_fields, run->n_points};
    text target = {NULL, 0, 0, 0};
    enum fate fate = UNKNOWN;
    npy_head(b->bytes, run->value_bytes, counts, 3);
    batch_target(run, b, &target);
    *got = (answer){0, 0, 0, -1, 0.0, {NULL, 0, 0, 0}};
    if (target.failed) {
        say(error, "out of memory");
    } else {
        request r = {"PUT", target.at, "application/x-npy", b->bytes, NPY_HEAD_BYTES + b->n * snapshot_bytes(run)};
        fate = exchange(&run->wire, &run->at, &r, got, error);
    }
    text_free(&target);
    return fate;
}

/* Take what a receipt says. Under the lock. */
static void take_receipt(slackwater *run, const char *receipt, size_t n)
{
    char advice[16] = "";
    (void)json_words(json_member(receipt, "advice"), advice, sizeof advice);
    (void)json_words(json_member(receipt, "verdict"), run->state.verdict, sizeof run->state.verdict);
    run->advice = strcmp(advice, "may stop") == 0 ? SLACKWATER_MAY_STOP : SLACKWATER_CONTINUE;
    run->state.snapshots_to_go = json_integer(json_member(json_member(receipt, "snapshots_to_go"), "estimate"), -1);
    run->state.sent_snapshots += (long long)n;
    run->state.in_contact = 1;
}

/* Give everything up that waits. Under the lock. */
static void stop_run(slackwater *run)
{
    while (run->first != NULL) {
        batch *b = remove_waiting(run);
        run->state.lost_snapshots += (long long)b->n;
        keep_spare(run, b);
    }
    run->stopped = 1;
    run->state.in_contact = 0;
}

/* Act on a sent batch: it is done, lost, or the run is over. Gives 1 when contact came back. */
static int settle_batch(slackwater *run, enum next step, const answer *got, const char *error)
{
    pthread_mutex_lock(&run->lock);
    int regained = !run->state.in_contact;
    size_t n = run->first->n;
    if (step == STOP) {
        stop_run(run);
    } else {
        keep_spare(run, remove_waiting(run));
        run->state.in_contact = 1; /* a refusal is an answer */
        if (step == DONE)
            take_receipt(run, got->body.at, n);
        else
            run->state.lost_snapshots += (long long)n;
    }
    if (step != DONE)
        say(run->state.last_error, "%s", error);
    pthread_cond_broadcast(&run->changed);
    pthread_mutex_unlock(&run->lock);
    return regained;
}

static void report_step(slackwater *run, enum next step, int regained, size_t n, const char *error)
{
    if (step == STOP)
        tell(run, "nothing more is sent: %s", error);
    else if (step == SKIP)
        tell(run, "a batch of %zu snapshots was refused and is lost: %s", n, error);
    else if (regained)
        tell(run, "the service answers again");
}

/* Note a failed try and wait before the next one, unless the run ends. */
static void wait_for_service(slackwater *run, double seconds, const char *error)
{
    pthread_mutex_lock(&run->lock);
    int first = run->state.in_contact;
    run->state.in_contact = 0;
    say(run->state.last_error, "%s", error);
    pthread_mutex_unlock(&run->lock);
    if (first)
        tell(run, "snapshots wait in memory while the service cannot take them: %s", error);
    wire_shut(&run->wire); /* only the end of the run is waited for */
    (void)wire_wait(&run->wire, 0, seconds);
}

/* Have a warm spare ready for the solver, made outside of the lock. */
static void prepare_spare(slackwater *run)
{
    pthread_mutex_lock(&run->lock);
    int wanted = run->spares == NULL && run->n_batches < run->max_batches && !run->ending && !run->stopped;
    run->n_batches += wanted ? 1 : 0;
    run->preparing = wanted;
    pthread_mutex_unlock(&run->lock);
    if (!wanted)
        return;
    batch *b = batch_warm(run, batch_make(run));
    pthread_mutex_lock(&run->lock);
    run->preparing = 0;
    if (b == NULL)
        run->n_batches--;
    else
        keep_spare(run, b);
    pthread_cond_broadcast(&run->changed);
    pthread_mutex_unlock(&run->lock);
}

/* Send one batch until its fate is known, or the run is given up. */
static void post_batch(slackwater *run, batch *b)
{
    size_t n = b->n;
    for (int attempt = 0; !run->wire.cancelled; attempt++) {
        char error[SLACKWATER_TEXT_BYTES] = "";
        answer got;
        prepare_spare(run); /* the solver has just taken the last one */
        enum fate fate = send_batch(run, b, &got, error);
        enum next step = fate == ANSWERED ? after_answer(&got) : AGAIN;
        if (fate == ANSWERED && step != DONE)
            explain(&run->at, &got, error);
        if (fate != GIVEN_UP && step != AGAIN) {
            int regained = settle_batch(run, step, &got, error);
            report_step(run, step, regained, n, error);
            run->sequence += step == DONE; /* numbered when sent, so that a refused batch leaves no gap */
        } else if (fate != GIVEN_UP) {
            wait_for_service(run, pause_seconds(run, attempt, got.retry_after_seconds), error);
        }
        text_free(&got.body);
        if (fate != GIVEN_UP && step != AGAIN)
            return;
    }
}

/* The batch to send now; waits for one; NULL when the run ends. */
static batch *next_batch(slackwater *run)
{
    pthread_mutex_lock(&run->lock);
    while (run->first == NULL && !run->ending && !run->stopped)
        pthread_cond_wait(&run->changed, &run->lock);
    batch *b = run->stopped ? NULL : run->first;
    pthread_mutex_unlock(&run->lock);
    return b;
}

static void run_free(slackwater *run)
{
    wire_shut(&run->wire);
    for (int k = 0; k < 2; k++)
        if (run->cancel[k] >= 0)
            (void)close(run->cancel[k]);
    batches_free(run->first);
    batches_free(run->spares);
    batch_free(run->filling);
    address_free(&run->at);
    free(run->id);
    free(run->path);
    pthread_mutex_destroy(&run->lock);
    pthread_cond_destroy(&run->changed);
    free(run);
}

static void *work(void *given)
{
    slackwater *run = given;
    batch *b;
    while (!run->wire.cancelled && (b = next_batch(run)) != NULL)
        post_batch(run, b);
    wire_shut(&run->wire);
    pthread_mutex_lock(&run->lock);
    run->ended = 1;
    int abandoned = run->abandoned;
    pthread_cond_broadcast(&run->changed);
    pthread_mutex_unlock(&run->lock);
    if (abandoned) /* the solver did not wait for it: the last one out clears up */
        run_free(run);
    return NULL;
}

/* ---- starting -------------------------------------------------------------------------------------------- */

static double within(double seconds, double otherwise)
{
    if (!(seconds > 0.0))
        return otherwise;
    return seconds < LONGEST_SETTING_SECONDS ? seconds : LONGEST_SETTING_SECONDS;
}

/* A wire for calls that wait for their answer. */
static wire patient_wire(double idle_seconds)
{
    return (wire){-1, -1, 0, 0, idle_seconds, 0, 0, {0}};
}

/* Whether the service may have acted on a request that failed: it has not when it was busy, starting or full. */
static int may_have_arrived(enum fate fate, const answer *got)
{
    return fate == UNKNOWN || (got->status >= 500 && got->status != 503 && got->status != 507);
}

/* Send a request until it is answered for good, or `seconds` are over; `once` for requests that must not arrive
 * twice. Gives OK, REFUSED or NO_ANSWER; the caller frees the body. */
static int call(slackwater *run, const request *r, double seconds, int once, answer *got, char *error)
{
    double deadline = now_seconds() + seconds;
    wire w = patient_wire(run->idle_seconds);
    for (int attempt = 0;; attempt++) {
        enum fate fate = exchange(&w, &run->at, r, got, error);
        enum next step = fate == ANSWERED ? after_answer(got) : AGAIN;
        wire_shut(&w);
        if (step == DONE) {
            say(error, "%s", ""); /* of tries before */
            return SLACKWATER_OK;
        }
        if (fate == ANSWERED)
            explain(&run->at, got, error);
        double pause = pause_seconds(run, attempt, got->retry_after_seconds);
        if (step != AGAIN)
            return SLACKWATER_REFUSED;
        if ((once && may_have_arrived(fate, got)) || now_seconds() + pause > deadline)
            return fate == ANSWERED ? SLACKWATER_REFUSED : SLACKWATER_NO_ANSWER;
        text_free(&got->body);
        (void)wire_wait(&w, 0, pause);
    }
}

/* Take a run from its resource, as the service described it. */
static int take_resource(slackwater *run, const char *resource, char *error)
{
    const char *declaration = json_member(resource, "declaration");
    char id[128], dtype[16];
    int timed;
    long long n_points = json_integer(json_member(declaration, "n_points"), 0);
    (void)json_words(json_member(resource, "id"), id, sizeof id);
    (void)json_words(json_member(declaration, "dtype"), dtype, sizeof dtype);
    run->n_fields = json_count(json_member(declaration, "fields"));
    run->n_points = n_points > 0 ? (size_t)n_points : 0;
    run->value_bytes = strcmp(dtype, "float64") == 0 ? 8 : 4;
    if (id[0] == '\0' || run->n_fields == 0 || run->n_points == 0 || run->n_fields > 4096 ||
        run->n_points > SIZE_MAX / MAX_BATCH / 8 / run->n_fields / 2) {
        say(error, "%s did not answer with a run; is it a Slackwater service?", run->at.url);
        return SLACKWATER_REFUSED;
    }
    run->sequence = json_integer(json_member(resource, "next_sequence"), 0);
    run->state.held_snapshots = json_integer(json_member(resource, "n_snapshots"), 0);
    run->resume_after = json_number(json_member(resource, "last_time"), &timed);
    run->resumes = timed;
    run->resume_after += RESUME_MARGIN_FRACTION * (run->resume_after < 0.0 ? -run->resume_after : run->resume_after);
    run->id = copy_of(id);
    text path = {NULL, 0, 0, 0};
    text_add(&path, "/v1/runs/");
    text_add_segment(&path, id);
    run->path = path.at;
    if (run->id != NULL && !path.failed)
        return SLACKWATER_OK;
    say(error, "out of memory");
    return SLACKWATER_REFUSED;
}

/* Sizes of batches and of the whole buffer, known only once the run is. */
static void take_sizes(slackwater *run, const slackwater_settings *wanted)
{
    size_t one = snapshot_bytes(run), n = wanted->batch_snapshots;
    if (n == 0) {
        n = DEFAULT_BATCH_BYTES / one;
        n = n < 1 ? 1 : n > DEFAULT_BATCH ? DEFAULT_BATCH : n;
    }
    run->batch_snapshots = n > MAX_BATCH ? MAX_BATCH : n;
    size_t room = wanted->max_waiting_bytes > 0 ? wanted->max_waiting_bytes : DEFAULT_WAITING_BYTES;
    run->max_batches = room / (run->batch_snapshots * one);
    if (run->max_batches < 2)
        run->max_batches = 2;
}

static slackwater *run_make(const slackwater_settings *wanted, char *error)
{
    const char *url = wanted->url != NULL ? wanted->url : getenv("SLACKWATER_URL");
    const char *token = wanted->token != NULL ? wanted->token : getenv("SLACKWATER_TOKEN");
    token = token != NULL && *token != '\0' ? token : NULL;
    slackwater *run = calloc(1, sizeof *run);
    pthread_condattr_t steady;
    if (run == NULL) {
        say(error, "out of memory");
        return NULL;
    }
    (void)pthread_mutex_init(&run->lock, NULL);
    (void)pthread_condattr_init(&steady);
    (void)pthread_condattr_setclock(&steady, CLOCK_MONOTONIC);
    (void)pthread_cond_init(&run->changed, &steady);
    (void)pthread_condattr_destroy(&steady);
    run->hold_seconds = within(wanted->hold_seconds, 0.0);
    run->idle_seconds = within(wanted->idle_seconds, 60.0);
    run->flush_seconds = within(wanted->flush_seconds, 60.0);
    run->tell = wanted->tell != NULL ? wanted->tell : tell_stderr;
    run->context = wanted->context;
    run->timed = -1;
    run->state.in_contact = 1;
    run->state.snapshots_to_go = -1;
    run->cancel[0] = run->cancel[1] = -1;
    run->wire = patient_wire(run->idle_seconds);
    run->dice = 0x9e3779b97f4a7c15ULL ^ (unsigned long long)(1e9 * now_seconds()) ^ (unsigned long long)getpid() << 40;
    if (address_parse(&run->at, url != NULL && *url != '\0' ? url : "http://127.0.0.1:8350", token, error) == 0)
        return run;
    run_free(run);
    return NULL;
}

/* Start the thread, with all signals left to the solver's own threads. */
static int start_thread(slackwater *run, char *error)
{
    sigset_t all, before;
    if (pipe(run->cancel) < 0) {
        run->cancel[0] = run->cancel[1] = -1;
        say(error, "no pipe: %s", strerror(errno));
        return SLACKWATER_REFUSED;
    }
    for (int k = 0; k < 2; k++)
        (void)make_unblocking(run->cancel[k]);
    run->wire.cancel_fd = run->cancel[0];
    (void)sigfillset(&all);
    (void)pthread_sigmask(SIG_SETMASK, &all, &before);
    int failed = pthread_create(&run->thread, NULL, work, run);
    (void)pthread_sigmask(SIG_SETMASK, &before, NULL);
    if (failed == 0)
        return SLACKWATER_OK;
    say(error, "no thread: %s", strerror(failed));
    return SLACKWATER_REFUSED;
}

/* Ask for the run with `r`, and start it. */
static slackwater *start(slackwater *run, const slackwater_settings *wanted, const request *r, int once, char *error)
{
    answer got;
    int failed = call(run, r, within(wanted->start_seconds, 10.0), once, &got, error);
    if (!failed)
        failed = take_resource(run, got.body.at, error);
    text_free(&got.body);
    if (!failed) {
        take_sizes(run, wanted);
        run->filling = batch_warm(run, batch_make(run));
        run->spares = batch_warm(run, batch_make(run));
        run->n_spares = 1;
        run->n_batches = 2;
        if (run->filling == NULL || run->spares == NULL) {
            say(error, "out of memory for two batches of %zu snapshots of %zu bytes", run->batch_snapshots,
                snapshot_bytes(run));
            failed = SLACKWATER_REFUSED;
        }
    }
    if (!failed)
        failed = start_thread(run, error);
    if (!failed)
        return run;
    run_free(run);
    return NULL;
}

slackwater *slackwater_declare(const slackwater_settings *settings, const char *declaration, char *error)
{
    const slackwater_settings defaults = SLACKWATER_DEFAULTS, *wanted = settings != NULL ? settings : &defaults;
    say(error, "%s", "");
    if (declaration == NULL) {
        say(error, "there is no declaration");
        return NULL;
    }
    slackwater *run = run_make(wanted, error);
    request r = {"POST", "/v1/runs", "application/json", declaration, strlen(declaration)};
    return run == NULL ? NULL : start(run, wanted, &r, 1, error);
}

slackwater *slackwater_attach(const slackwater_settings *settings, const char *run_id, char *error)
{
    const slackwater_settings defaults = SLACKWATER_DEFAULTS, *wanted = settings != NULL ? settings : &defaults;
    text target = {NULL, 0, 0, 0};
    say(error, "%s", "");
    if (run_id == NULL || *run_id == '\0') {
        say(error, "the id of the run is empty");
        return NULL;
    }
    slackwater *run = run_make(wanted, error);
    text_add(&target, "/v1/runs/");
    text_add_segment(&target, run_id);
    if (run != NULL && !target.failed) {
        request r = {"GET", target.at, NULL, NULL, 0};
        run = start(run, wanted, &r, 0, error);
    }
    text_free(&target);
    return run;
}

const char *slackwater_run_id(const slackwater *run)
{
    return run == NULL ? "" : run->id;
}

/* ---- before the first post --------------------------------------------------------------------------------- */

static int put_array(slackwater *run, const char *name, const double *values, const size_t *counts, size_t axes,
                     char *error)
{
    size_t n_bytes = sizeof *values;
    text target = {NULL, 0, 0, 0}, body = {NULL, 0, 0, 0};
    char head[NPY_HEAD_BYTES];
    answer got;
    int outcome = SLACKWATER_REFUSED;
    for (size_t k = 0; k < axes; k++)
        n_bytes *= counts[k];
    npy_head(head, sizeof *values, counts, axes);
    text_add(&target, run->path);
    text_add(&target, name);
    text_add_bytes(&body, head, sizeof head);
    text_add_bytes(&body, (const char *)values, n_bytes);
    if (target.failed || body.failed) {
        say(error, "out of memory");
    } else {
        request r = {"PUT", target.at, "application/x-npy", body.at, body.length};
        outcome = call(run, &r, run->flush_seconds, 0, &got, error);
        text_free(&got.body);
    }
    text_free(&target);
    text_free(&body);
    return outcome;
}

int slackwater_put_weights(slackwater *run, const double *weights, size_t n, char *error)
{
    if (run == NULL)
        return SLACKWATER_NO_RUN;
    if (n != run->n_points && n != run->n_fields * run->n_points) {
        say(error, "%zu weights came; the run takes %zu, or %zu for each of its %zu fields", n, run->n_points,
            run->n_points, run->n_fields);
        return SLACKWATER_MISFIT;
    }
    const size_t counts[2] = {n == run->n_points ? n : run->n_fields, run->n_points};
    return put_array(run, "/weights", weights, counts, n == run->n_points ? 1 : 2, error);
}

int slackwater_put_positions(slackwater *run, const double *positions, size_t n_points, size_t n_axes, char *error)
{
    if (run == NULL)
        return SLACKWATER_NO_RUN;
    if (n_points != run->n_points || n_axes < 1 || n_axes > 3) {
        say(error, "positions of %zu points on %zu axes came; the run has %zu points, on 1 to 3 axes", n_points, n_axes,
            run->n_points);
        return SLACKWATER_MISFIT;
    }
    const size_t counts[2] = {n_points, n_axes};
    return put_array(run, "/positions", positions, counts, 2, error);
}

/* ---- posting --------------------------------------------------------------------------------------------- */

/* Copy n values of `from_bytes` each to where values of `to_bytes` each go. */
static void copy_values(char *to, size_t to_bytes, const void *from, size_t from_bytes, size_t n)
{
    if (to_bytes == from_bytes) {
        memcpy(to, from, n * to_bytes);
    } else if (to_bytes == 4) {
        const double *wide = from;
        float *narrow = (float *)(void *)to;
        for (size_t k = 0; k < n; k++)
            narrow[k] = (float)wide[k];
    } else {
        const float *narrow = from;
        double *wide = (double *)(void *)to;
        for (size_t k = 0; k < n; k++)
            wide[k] = (double)narrow[k];
    }
}

/* Queue the filled batch and begin another. OK, or LOST when there is no room within hold_seconds. */
static int hand_over(slackwater *run)
{
    struct timespec deadline = at_seconds(now_seconds() + run->hold_seconds);
    int outcome = SLACKWATER_OK, late = run->hold_seconds <= 0.0;
    pthread_mutex_lock(&run->lock);
    batch *b = take_spare(run);
    while (b == NULL && (run->preparing || !late) && !run->stopped) {
        if (run->preparing) /* one is nearly ready */
            pthread_cond_wait(&run->changed, &run->lock);
        else
            late = pthread_cond_timedwait(&run->changed, &run->lock, &deadline) != 0;
        b = take_spare(run);
    }
    run->n_filling = 0;
    if (b == NULL || run->stopped) { /* the batch that there is no room for is given up, and filled anew */
        run->state.lost_snapshots += (long long)run->filling->n;
        outcome = run->stopped ? SLACKWATER_STOPPED : SLACKWATER_LOST;
        run->filling->n = 0;
        if (b != NULL)
            keep_spare(run, b);
    } else {
        append_waiting(run, run->filling);
        run->filling = b;
    }
    pthread_mutex_unlock(&run->lock);
    pthread_cond_broadcast(&run->changed); /* after the lock, so that the woken thread does not run into it */
    return outcome;
}

/* Say why a snapshot is not as declared; 0 when it is. */
static int misfits(const slackwater *run, double time, size_t n_fields, size_t n_points, char *why)
{
    int timed = time == time; /* NaN differs from itself */
    int joined = n_fields == 1 && n_points == run->n_fields * run->n_points;
    if (!joined && (n_fields != run->n_fields || n_points != run->n_points))
        say(why, "a snapshot of %zu x %zu values came; the run takes %zu fields x %zu points", n_fields, n_points,
            run->n_fields, run->n_points);
    else if (run->timed >= 0 && run->timed != timed)
        say(why, "a snapshot came %s a time, those before %s; give times always or never", timed ? "with" : "without",
            timed ? "without" : "with");
    else if (timed && time - time != 0.0)
        say(why, "a snapshot came with an infinite time");
    else if (timed && run->timed == 1 && time <= run->last_time)
        say(why, "times must increase: %.17g came after %.17g", time, run->last_time);
    else
        return 0;
    return 1;
}

/* What to do with a snapshot before it is copied: OK takes it. */
static int judge(slackwater *run, double time, size_t n_fields, size_t n_points)
{
    int outcome = SLACKWATER_OK;
    pthread_mutex_lock(&run->lock);
    if (misfits(run, time, n_fields, n_points, run->state.last_error)) {
        outcome = SLACKWATER_MISFIT;
    } else if (run->resumes && time <= run->resume_after) {
        run->state.skipped_snapshots++;
        outcome = SLACKWATER_SKIPPED;
    } else if (run->stopped) {
        run->state.lost_snapshots++;
        outcome = SLACKWATER_STOPPED;
    } else {
        run->timed = time == time;
        run->last_time = time;
        run->n_filling++;
    }
    pthread_mutex_unlock(&run->lock);
    return outcome;
}

static int post(slackwater *run, double time, const void *const *fields, size_t n_fields, size_t n_points, size_t bytes)
{
    if (run == NULL)
        return SLACKWATER_NO_RUN;
    int outcome = judge(run, time, n_fields, n_points);
    if (outcome != SLACKWATER_OK)
        return outcome;
    batch *b = run->filling;
    char *to = b->bytes + NPY_HEAD_BYTES + b->n * snapshot_bytes(run);
    for (size_t k = 0; k < n_fields; k++)
        copy_values(to + k * n_points * run->value_bytes, run->value_bytes, fields[k], bytes, n_points);
    b->timed = time == time;
    b->times[b->n++] = time;
    return b->n == run->batch_snapshots ? hand_over(run) : SLACKWATER_OK;
}

int slackwater_post_float(slackwater *run, double time, const float *const *fields, size_t n_fields, size_t n_points)
{
    return post(run, time, (const void *const *)fields, n_fields, n_points, sizeof(float));
}

int slackwater_post_double(slackwater *run, double time, const double *const *fields, size_t n_fields, size_t n_points)
{
    return post(run, time, (const void *const *)fields, n_fields, n_points, sizeof(double));
}

enum slackwater_advice slackwater_advise(slackwater *run)
{
    if (run == NULL)
        return SLACKWATER_CONTINUE;
    pthread_mutex_lock(&run->lock);
    enum slackwater_advice advice = run->state.in_contact ? run->advice : SLACKWATER_CONTINUE;
    pthread_mutex_unlock(&run->lock);
    return advice;
}

void slackwater_read_state(slackwater *run, slackwater_state *state)
{
    if (run == NULL) {
        memset(state, 0, sizeof *state);
        state->snapshots_to_go = -1;
        return;
    }
    pthread_mutex_lock(&run->lock);
    *state = run->state;
    state->waiting_snapshots += (long long)run->n_filling;
    pthread_mutex_unlock(&run->lock);
}

/* ---- ending ----------------------------------------------------------------------------------------------- */

/* Wait until all is sent or the deadline has come, then end the thread. 1 when the thread has ended. */
static int finish(slackwater *run, double moment)
{
    struct timespec deadline = at_seconds(moment);
    int late = 0;
    pthread_mutex_lock(&run->lock);
    run->ending = 1;
    run->n_filling = 0;
    if (run->stopped) {
        run->state.lost_snapshots += (long long)run->filling->n;
    } else if (run->filling->n > 0) {
        append_waiting(run, run->filling);
        run->filling = NULL;
    }
    pthread_cond_broadcast(&run->changed);
    while (!run->ended && !late)
        late = pthread_cond_timedwait(&run->changed, &run->lock, &deadline) != 0;
    if (!run->ended) {
        deadline = at_seconds(now_seconds() + ANOTHER_MOMENT_SECONDS);
        while (write(run->cancel[1], "", 1) < 0 && errno == EINTR) {
        }
        for (late = 0; !run->ended && !late;)
            late = pthread_cond_timedwait(&run->changed, &run->lock, &deadline) != 0;
    }
    int ended = run->ended;
    pthread_mutex_unlock(&run->lock);
    return ended;
}

/* Tell the service that no more data will come. */
static int close_at_service(slackwater *run, double seconds, char *error)
{
    text target = {NULL, 0, 0, 0};
    answer got;
    int outcome = SLACKWATER_REFUSED;
    text_add(&target, run->path);
    text_add(&target, "/close");
    if (target.failed) {
        say(error, "out of memory");
        return outcome;
    }
    request r = {"POST", target.at, NULL, NULL, 0};
    outcome = call(run, &r, seconds, 0, &got, error);
    if (outcome == SLACKWATER_OK)
        (void)json_words(json_member(got.body.at, "verdict"), run->state.verdict, sizeof run->state.verdict);
    text_free(&got.body);
    text_free(&target);
    return outcome;
}

/* Let the run go: join the thread, or leave the run to it when it hangs in a name look-up. */
static void part_from(slackwater *run, int ended)
{
    if (!ended) {
        pthread_mutex_lock(&run->lock);
        run->abandoned = !run->ended;
        ended = run->ended;
        (void)(ended ? 0 : pthread_detach(run->thread));
        pthread_mutex_unlock(&run->lock);
    }
    if (ended) {
        (void)pthread_join(run->thread, NULL);
        run_free(run);
    }
}

static int end(slackwater *run, int closing, slackwater_state *last, char *error)
{
    slackwater_state state;
    int outcome = SLACKWATER_OK;
    say(error, "%s", "");
    if (run == NULL) {
        if (last != NULL)
            slackwater_read_state(NULL, last);
        return SLACKWATER_NO_RUN;
    }
    double deadline = now_seconds() + run->flush_seconds;
    int ended = finish(run, deadline);
    slackwater_read_state(run, &state);
    if (state.waiting_snapshots > 0 || state.lost_snapshots > 0) {
        say(error, "%lld snapshots were sent, %lld could not be sent, %lld were refused or found no room; last error: "
            "%.300s", state.sent_snapshots, state.waiting_snapshots, state.lost_snapshots, state.last_error);
        outcome = SLACKWATER_UNSENT;
    } else if (closing) {
        double left = deadline - now_seconds(), patience = left > CLOSE_SECONDS ? left : CLOSE_SECONDS;
        run->idle_seconds = run->idle_seconds < patience ? run->idle_seconds : patience;
        outcome = close_at_service(run, left, error);
        slackwater_read_state(run, &state);
    }
    if (last != NULL)
        *last = state;
    part_from(run, ended);
    return outcome;
}

int slackwater_detach(slackwater *run, slackwater_state *last, char *error)
{
    return end(run, 0, last, error);
}

int slackwater_close(slackwater *run, slackwater_state *last, char *error)
{
    return end(run, 1, last, error);
}
