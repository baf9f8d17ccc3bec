/* Checks the small parts of slackwater.c that have no address of their own: texts, JSON, addresses, NPY heads.
 * Prints nothing and ends with 0 when all hold. */
#include "slackwater.c"

static int failures;

static void check(int holds, const char *what)
{
    if (!holds) {
        failures++;
        fprintf(stderr, "does not hold: %s\n", what);
    }
}

#define CHECK(claim) check((claim), #claim)

static int printed_is(const char *printed, const char *wanted)
{
    text t = {NULL, 0, 0, 0};
    text_add_printed(&t, printed);
    int same = strcmp(t.at, wanted) == 0;
    text_free(&t);
    return same;
}

static void check_numbers(void)
{
    CHECK(printed_is("0.5", "0.5"));
    CHECK(printed_is("1,5e+20", "1.5e20"));
    CHECK(printed_is("-1\xd9\xab" "25e-07", "-1.25e-07")); /* U+066B, two bytes */
    text t = {NULL, 0, 0, 0};
    text_add_number(&t, 1.0 / 3.0);
    CHECK(strtod(t.at, NULL) == 1.0 / 3.0);
    text_free(&t);
    int known;
    CHECK(json_number("12.25,", &known) == 12.25 && known);
    CHECK(json_number("-3e2}", &known) == -300.0 && known);
    CHECK(json_number("null", &known) == 0.0 && !known);
    CHECK(json_number(NULL, &known) == 0.0 && !known);
    CHECK(json_number("1e999999999999", &known) > 1e300);
    CHECK(json_integer("17,", -1) == 17 && json_integer("17.5", -1) == -1 && json_integer("x", -1) == -1);
    CHECK(json_integer("99999999999999999999", -1) == -1);
}

static void check_json(void)
{
    const char *object = " { \"a\\\"b\" : [1, {\"x\": \"}\"}], \"n\":7 ,"
                         "\"s\":\"one \\\"two\\\"\\n\\u00e9\\u20ac\\ud83d\\u0000.\","
                         "\"list\":[{}, [], \"]\" , null], \"empty\": [] } ";
    char words[64];
    CHECK(json_integer(json_member(object, "n"), -1) == 7);
    CHECK(json_member(object, "x") == NULL && json_member(object, "N") == NULL && json_member(NULL, "n") == NULL);
    CHECK(json_words(json_member(object, "s"), words, sizeof words));
    CHECK(strcmp(words, "one \"two\" \xc3\xa9\xe2\x82\xac? .") == 0);
    CHECK(json_words(json_member(object, "s"), words, 9) && strcmp(words, "one \"") == 0);
    CHECK(!json_words(json_member(object, "n"), words, sizeof words) && words[0] == '\0');
    CHECK(json_count(json_member(object, "list")) == 4 && json_count(json_member(object, "empty")) == 0);
    const char *broken[] = {"", "{", "{\"n\"", "{\"n\":", "{\"n\":}", "{\"n\" 1}", "{\"n\":\"\\",
                            "{\"n\":[1,}", "{\"n\":[1 2]}",
                            "{\"n\":{\"m\"}}", "[1]", "{n:1}", "{\"m\":1 \"n\":2}", "{\"n\":\"\\u12"};
    for (size_t k = 0; k < sizeof broken / sizeof *broken; k++)
        check(json_member(broken[k], "n") == NULL, broken[k]);
    char deep[4 * MAX_DEPTH + 8] = "{\"n\":";
    memset(deep + 5, '[', sizeof deep - 6);
    CHECK(json_member(deep, "n") == NULL);
    CHECK(json_words("\"\\u12\"", words, sizeof words)); /* broken escapes do not run past the end */
}

static int parses(const char *url, const char *host, const char *port, const char *prefix)
{
    address a = {NULL, NULL, NULL, NULL, NULL, NULL};
    int fits = address_parse(&a, url, NULL, NULL) == 0 && strcmp(a.host, host) == 0 && strcmp(a.port, port) == 0 &&
               strcmp(a.prefix, prefix) == 0;
    address_free(&a);
    return fits;
}

static int refuses(const char *url, const char *token)
{
    address a = {NULL, NULL, NULL, NULL, NULL, NULL};
    int refused = address_parse(&a, url, token, NULL) != 0;
    address_free(&a);
    return refused;
}

static void check_addresses(void)
{
    CHECK(parses("http://127.0.0.1:8350", "127.0.0.1", "8350", ""));
    CHECK(parses("http://node17/", "node17", "80", ""));
    CHECK(parses("http://[::1]:99/flow//", "::1", "99", "/flow"));
    CHECK(refuses("http://", NULL) && refuses("node17:8350", NULL) && refuses("http://:80", NULL));
    CHECK(refuses("http://[::1]x", NULL) && refuses("http://a:b", NULL) && refuses("http://a b", NULL));
    CHECK(refuses("http://a", "x\r\nY: z") && !refuses("http://a", "0123456789abcdef"));
}

static void check_heads(void)
{
    const size_t counts[3] = {8, 2, 60}, largest[3] = {MAX_BATCH, 4096, SIZE_MAX / 16000}, one[1] = {60};
    char head[NPY_HEAD_BYTES + 1] = {0};
    npy_head(head, 4, counts, 3);
    CHECK(memcmp(head, "\x93NUMPY\x01\x00\x76\x00", 10) == 0);
    CHECK(strncmp(head + 10, "{'descr': '<f4', 'fortran_order': False, 'shape': (8, 2, 60), } ", 64) == 0 ||
          head[21] == '>');
    npy_head(head, 8, one, 1);
    CHECK(strstr(head + 10, "'shape': (60,), }") != NULL);
    npy_head(head, 8, largest, 3);
    CHECK(head[NPY_HEAD_BYTES - 1] == '\n' && strchr(head + 10, '}') != NULL);
}

int main(void)
{
    check_numbers();
    check_json();
    check_addresses();
    check_heads();
    return failures > 0;
}
