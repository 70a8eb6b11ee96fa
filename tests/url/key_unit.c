/* Page keys: their bytes, their order, the way back, and keys from damaged files. */
#include "url/keyer.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

struct text {
    char bytes[256];
    size_t count;
};

static struct windrow_keyer *keyer;

static int keyer_make(void **state)
{
    (void)state;
    return windrow_keyer_create(&keyer) == WINDROW_OK ? 0 : -1;
}

static int keyer_drop(void **state)
{
    (void)state;
    windrow_keyer_destroy(keyer);
    return 0;
}

static struct text key_of(const char *url)
{
    struct text key;
    const char *bytes;
    assert_int_equal(windrow_keyer_key(keyer, url, strlen(url), &bytes, &key.count), WINDROW_URL_OK);
    assert_true(key.count <= sizeof key.bytes);
    memcpy(key.bytes, bytes, key.count);
    return key;
}

static void check_key(const char *url, const char *expected, size_t expected_bytes)
{
    struct text key = key_of(url);
    assert_int_equal(key.count, expected_bytes);
    assert_memory_equal(key.bytes, expected, expected_bytes);
    char back[256];
    size_t back_bytes = windrow_key_url(key.bytes, key.count, back, sizeof back);
    assert_int_equal(back_bytes, strlen(url));
    assert_memory_equal(back, url, back_bytes);
    assert_true(windrow_key_validate(key.bytes, key.count));
}

#define CHECK_KEY(url, key) check_key(url, key, sizeof key - 1)

static void bytes_of_a_key_are_as_documented(void **state)
{
    (void)state;
    CHECK_KEY("https://www.north.example/a?b", "example\1north\1www\0\3/a?b");
    CHECK_KEY("http://north.example/", "example\1north\0\1/");
    CHECK_KEY("http://north.example:8080/", "example\1north\0\2\x1F\x90/");
    CHECK_KEY("https://localhost:80/x", "localhost\0\4\0\x50/x");
    CHECK_KEY("http://x:0/", "x\0\2\0\0/");
    CHECK_KEY("http://x:65535/", "x\0\2\xFF\xFF/");
    CHECK_KEY("http://[::ffff:192.0.2.1]/", "[::ffff:192.0.2.1]\0\1/");
    CHECK_KEY("http://192.0.2.1/", "1\1" "2\1" "0\1" "192\0\1/");
}

static void host_text_comes_back(void **state)
{
    (void)state;
    struct text key = key_of("https://www.north.example:1/a?b");
    char host[32];
    assert_int_equal(windrow_key_host_bytes(key.bytes, key.count), 17);
    assert_int_equal(windrow_key_host(key.bytes, key.count, host, 18), 17);
    assert_string_equal(host, "www.north.example");
    assert_int_equal(windrow_key_host(key.bytes, 17, host, 18), 17);
    assert_string_equal(host, "www.north.example");
    assert_int_equal(windrow_key_host(key.bytes, key.count, host, 17), 0);
    key = key_of("http://[::1]/");
    assert_int_equal(windrow_key_host(key.bytes, key.count, host, sizeof host), 5);
    assert_string_equal(host, "[::1]");
}

static void room_too_small_gives_nothing(void **state)
{
    (void)state;
    const char *url = "http://north.example:8080/x";
    struct text key = key_of(url);
    char out[64];
    assert_int_equal(windrow_key_url(key.bytes, key.count, out, strlen(url)), strlen(url));
    for (size_t room = 0; room < strlen(url); room++)
        assert_int_equal(windrow_key_url(key.bytes, key.count, out, room), 0);
}

/* A random URL in normal form and what it is made of, from few letters, so that neighbours abound. */
struct parts {
    char labels[4][3]; /* from the top-level domain down */
    int label_count;
    int https;
    int port; /* -1: the default */
    char path[8];
};

static void parts_make(struct parts *parts, char *url)
{
    static const char letters[] = "ab-_09";
    static const int ports[] = {0, 1, 79, 255, 256, 8080, 65535};
    parts->label_count = 1 + (int)(random() % 4);
    for (int i = 0; i < parts->label_count; i++) {
        parts->labels[i][0] = letters[random() % 6];
        parts->labels[i][1] = random() % 2 ? letters[random() % 6] : '\0';
        parts->labels[i][2] = '\0';
    }
    parts->https = (int)(random() % 2);
    parts->port = random() % 2 ? ports[random() % 7] : -1;
    size_t path_bytes = 1 + (size_t)(random() % 6);
    parts->path[0] = '/';
    for (size_t i = 1; i < path_bytes; i++)
        parts->path[i] = "!ab/~z"[random() % 6];
    parts->path[path_bytes] = '\0';
    url += sprintf(url, "%s://", parts->https ? "https" : "http");
    for (int i = parts->label_count - 1; i >= 0; i--)
        url += sprintf(url, "%s%s", parts->labels[i], i > 0 ? "." : "");
    if (parts->port >= 0)
        url += sprintf(url, ":%d", parts->port);
    strcpy(url, parts->path);
}

static int sign(int value)
{
    return (value > 0) - (value < 0);
}

/* Host order as the design words it, with no key in sight. */
static int parts_compare(const struct parts *a, const struct parts *b)
{
    for (int i = 0; i < a->label_count && i < b->label_count; i++)
        if (strcmp(a->labels[i], b->labels[i]) != 0)
            return sign(strcmp(a->labels[i], b->labels[i]));
    if (a->label_count != b->label_count)
        return sign(a->label_count - b->label_count);
    if (a->https != b->https)
        return sign(a->https - b->https);
    if (a->port != b->port)
        return sign(a->port - b->port);
    return sign(strcmp(a->path, b->path));
}

static void order_of_keys_is_host_order(void **state)
{
    (void)state;
    srandom(7);
    for (int round = 0; round < 300000; round++) {
        struct parts a, b;
        char url_a[64], url_b[64];
        parts_make(&a, url_a);
        if (random() % 2) {
            parts_make(&b, url_b);
        } else {
            /* Same host, so that scheme, port and path decide. */
            struct parts host = a;
            do
                parts_make(&b, url_b);
            while (b.label_count != host.label_count && random() % 64);
            memcpy(b.labels, host.labels, sizeof b.labels);
            b.label_count = host.label_count;
            char *write = url_b + sprintf(url_b, "%s://", b.https ? "https" : "http");
            for (int i = b.label_count - 1; i >= 0; i--)
                write += sprintf(write, "%s%s", b.labels[i], i > 0 ? "." : "");
            if (b.port >= 0)
                write += sprintf(write, ":%d", b.port);
            strcpy(write, b.path);
        }
        struct text key_a = key_of(url_a), key_b = key_of(url_b);
        int expected = parts_compare(&a, &b);
        if (sign(windrow_key_compare(key_a.bytes, key_a.count, key_b.bytes, key_b.count)) != expected)
            fail_msg("%s and %s: expected %d", url_a, url_b, expected);
        assert_int_equal(sign(windrow_key_compare(key_b.bytes, key_b.count, key_a.bytes, key_a.count)), -expected);
        char back[64];
        assert_int_equal(windrow_key_url(key_a.bytes, key_a.count, back, sizeof back), strlen(url_a));
        assert_memory_equal(back, url_a, strlen(url_a));
    }
}

#define CHECK_VALID(key) assert_true(windrow_key_validate(key, sizeof key - 1))
#define CHECK_INVALID(key) assert_false(windrow_key_validate(key, sizeof key - 1))

static void keys_not_in_normal_form_are_found(void **state)
{
    (void)state;
    CHECK_INVALID("");
    CHECK_INVALID("example");
    CHECK_INVALID("example\0");
    CHECK_INVALID("example\0\1");
    CHECK_INVALID("example\0\0/");
    CHECK_INVALID("example\0\5/");
    CHECK_INVALID("example\0\1x");
    CHECK_INVALID("example\0\2/");
    CHECK_INVALID("example\0\2\x1F\x90");
    CHECK_INVALID("example\0\2\0\x50/");   /* http with its default port */
    CHECK_INVALID("example\0\4\1\xBB/");   /* https with its own */
    CHECK_INVALID("\0\1/");
    CHECK_INVALID("\1example\0\1/");
    CHECK_INVALID("example\1\0\1/");
    CHECK_INVALID("example\1\1a\0\1/");
    CHECK_INVALID("Example\0\1/");
    CHECK_INVALID("exa.mple\0\1/");
    CHECK_INVALID("exa mple\0\1/");
    CHECK_INVALID("[::G]\0\1/");
    CHECK_INVALID("[::A]\0\1/");
    CHECK_INVALID("[::1]\1a\0\1/");
    CHECK_INVALID("example\0\1/a b");
    CHECK_INVALID("example\0\1/a#b");
    CHECK_INVALID("example\0\1/a\0b");
    CHECK_INVALID("example\0\1/\xC3\xBC");
    CHECK_INVALID("example\0\1/%");
    CHECK_INVALID("example\0\1/%2");
    CHECK_INVALID("example\0\1/%2f");
    CHECK_INVALID("example\0\1/%41");
    CHECK_INVALID("example\0\1/.");
    CHECK_INVALID("example\0\1/..");
    CHECK_INVALID("example\0\1/a/./b");
    CHECK_INVALID("example\0\1/a/../b");
    CHECK_INVALID("example\0\1/a/..?b");
    CHECK_VALID("example\0\1/a?/../b");
    CHECK_VALID("example\0\1/.../..a/%2F");
}

/* Valid means: what the URL turns back into. Damage that keeps a key valid is possible; anything else is found. */
static void damaged_keys_are_valid_only_as_keys_of_other_urls(void **state)
{
    (void)state;
    static const char *const urls[] = {"https://www.north.example/a/%2F?b", "http://[::1]:8080/.x/..y?/../",
                                       "http://192.0.2.1:81/%C3%BC/", "https://a/"};
    srandom(11);
    for (int round = 0; round < 400000; round++) {
        struct text key = key_of(urls[random() % 4]);
        for (long i = random() % 3; i >= 0; i--) {
            size_t at = (size_t)random() % key.count;
            key.bytes[at] = random() % 2 ? (char)(key.bytes[at] ^ 1 << random() % 8) : "\0\1./%?[A~"[random() % 9];
        }
        if (random() % 8 == 0)
            key.count = (size_t)random() % key.count;
        /* On the heap, of exactly its size, so that the sanitizers see a step outside. */
        char *exact = malloc(key.count > 0 ? key.count : 1), url[256], host[256];
        memcpy(exact, key.bytes, key.count);
        size_t url_bytes = windrow_key_url(exact, key.count, url, sizeof url);
        windrow_key_host(exact, key.count, host, sizeof host);
        bool valid = windrow_key_validate(exact, key.count), same = false;
        const char *again;
        size_t again_bytes;
        if (url_bytes > 0 && windrow_keyer_key(keyer, url, url_bytes, &again, &again_bytes) == WINDROW_URL_OK)
            same = again_bytes == key.count && memcmp(again, exact, again_bytes) == 0;
        if (valid != same)
            fail_msg("%.*s: valid %d, comes back %d", (int)url_bytes, url, valid, same);
        free(exact);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(bytes_of_a_key_are_as_documented),
        cmocka_unit_test(host_text_comes_back),
        cmocka_unit_test(room_too_small_gives_nothing),
        cmocka_unit_test(order_of_keys_is_host_order),
        cmocka_unit_test(keys_not_in_normal_form_are_found),
        cmocka_unit_test(damaged_keys_are_valid_only_as_keys_of_other_urls),
    };
    return cmocka_run_group_tests(tests, keyer_make, keyer_drop);
}
