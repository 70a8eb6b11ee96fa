/* What the keyer remembers must never show, and its short cuts must not change a byte. That it equals the plain
 * way for any text is tests/fuzz/url_unit.c. */
#include "url/keyer.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

static void check(struct windrow_keyer *keyer, const char *text, size_t bytes)
{
    static char normal[WINDROW_URL_BYTES_MAX], url[WINDROW_URL_BYTES_MAX];
    size_t normal_bytes = 0, key_bytes;
    const char *key;
    enum windrow_url_verdict plain = windrow_url_normalise(text, bytes, normal, &normal_bytes);
    enum windrow_url_verdict fast = windrow_keyer_key(keyer, text, bytes, &key, &key_bytes);
    if (plain != fast)
        fail_msg("%.*s: verdict %d instead of %d", (int)bytes, text, fast, plain);
    if (plain != WINDROW_URL_OK)
        return;
    size_t url_bytes = windrow_key_url(key, key_bytes, url, sizeof url);
    if (url_bytes != normal_bytes || memcmp(url, normal, url_bytes) != 0)
        fail_msg("%.*s: %.*s instead of %.*s", (int)bytes, text, (int)url_bytes, url, (int)normal_bytes, normal);
}

static void every_byte_at_every_place_of_a_path(void **state)
{
    (void)state;
    struct windrow_keyer *keyer;
    assert_int_equal(windrow_keyer_create(&keyer), WINDROW_OK);
    char text[128];
    /* Lengths around the sixteen bytes of a vector, one and two of them. */
    for (size_t path_bytes = 1; path_bytes <= 50; path_bytes++) {
        for (size_t at = 1; at < path_bytes; at++) {
            for (int byte = 0; byte < 256; byte++) {
                size_t front = (size_t)sprintf(text, "http://a.example/");
                memset(text + front, 'x', path_bytes);
                text[front - 1 + at] = (char)byte;
                check(keyer, text, front - 1 + path_bytes);
            }
            size_t front = (size_t)sprintf(text, "http://a.example/");
            memset(text + front, 'x', path_bytes);
            memcpy(text + front - 1 + at, "/./x", 4);
            check(keyer, text, front - 1 + path_bytes);
            memcpy(text + front - 1 + at, "/../", 4);
            check(keyer, text, front - 1 + path_bytes);
        }
    }
    windrow_keyer_destroy(keyer);
}

static void hosts_remembered_do_not_mix(void **state)
{
    (void)state;
    static const char *const texts[] = {
        "http://a.example/x", "http://a.example", "http://a.example?x", "http://a.example#x", "http://a.example.evil.test/x",
        "http://a.example:80/x", "http://a.example:8080/x", "http://a.example@b.example/x", "https://a.example/x",
        "HTTP://a.example/x", "http://A.example/x", "http://a.exampl/x", "http://a.example/", "http://a.example\\/x",
        "http://a.example /x", "http://a.example./x", "http:/a.example/x", "ftp://a.example/x", "", "http://",
    };
    enum { TEXTS = sizeof texts / sizeof *texts };
    struct windrow_keyer *keyer;
    assert_int_equal(windrow_keyer_create(&keyer), WINDROW_OK);
    for (int first = 0; first < TEXTS; first++)
        for (int second = 0; second < TEXTS; second++) {
            check(keyer, texts[first], strlen(texts[first]));
            check(keyer, texts[second], strlen(texts[second]));
            check(keyer, texts[first], strlen(texts[first]));
        }
    /* More hosts than it can remember, so that places are taken over, some names too long to be kept. */
    char text[300];
    srandom(3);
    for (int round = 0; round < 100000; round++) {
        int bytes = sprintf(text, "http%s://h%ld.%.*s.example/%ld", round % 2 ? "s" : "", random() % 2000,
                            (int)(random() % 100) + 1,
                            "aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa",
                            random());
        check(keyer, text, (size_t)bytes);
    }
    windrow_keyer_destroy(keyer);
}

static void limits_are_the_plain_ones(void **state)
{
    (void)state;
    struct windrow_keyer *keyer;
    assert_int_equal(windrow_keyer_create(&keyer), WINDROW_OK);
    size_t room = WINDROW_URL_BYTES_MAX + 64;
    char *text = malloc(room);
    for (int round = 0; round < 2; round++) {
        static const char *const fillings[] = {"x", "\"", "%41", "\xC3\xBC", "/.", "/..", "."};
        for (size_t i = 0; i < sizeof fillings / sizeof *fillings; i++) {
            size_t front = (size_t)sprintf(text, round == 0 ? "http://a.example/" : "https://a.example:8080/");
            for (size_t at = front; at < room; at++)
                text[at] = fillings[i][(at - front) % strlen(fillings[i])];
            for (size_t bytes = WINDROW_URL_BYTES_MAX - 3; bytes <= WINDROW_URL_BYTES_MAX + 3; bytes++)
                check(keyer, text, bytes);
            check(keyer, text, WINDROW_URL_BYTES_MAX / 3);
            /* The same as a host. */
            memcpy(text + front - 1, "x", 1);
            for (size_t bytes = WINDROW_URL_BYTES_MAX - 3; bytes <= WINDROW_URL_BYTES_MAX + 3; bytes++)
                check(keyer, text, bytes);
        }
    }
    free(text);
    windrow_keyer_destroy(keyer);
}

static void destroying_nothing_is_fine(void **state)
{
    (void)state;
    windrow_keyer_destroy(NULL);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(every_byte_at_every_place_of_a_path),
        cmocka_unit_test(hosts_remembered_do_not_mix),
        cmocka_unit_test(limits_are_the_plain_ones),
        cmocka_unit_test(destroying_nothing_is_fine),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
