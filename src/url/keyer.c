#include "url/keyer.h"

#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

/* Authorities remembered, and the longest one: hosts of links come in bursts, long ones are rare. */
enum { SLOTS = 256, SLOT_TEXT_BYTES = 88 };

/* A scheme and authority as it was written, and the front of the key that it gives. */
struct slot {
    uint32_t text_bytes; /* 0 in an empty slot */
    uint32_t front_bytes;
    uint32_t url_bytes; /* of the normal form up to its path */
    char text[SLOT_TEXT_BYTES];
    char front[SLOT_TEXT_BYTES + 4];
};

/* The key is put together at the end of the front's room, so that the path has a fixed place and the
 * front of the last key can stay where it is. */
enum { FRONT_ROOM = WINDROW_URL_BYTES_MAX + 4, PATH_ROOM = 3 * WINDROW_URL_BYTES_MAX + 1 };

struct windrow_keyer {
    struct slot slots[SLOTS];
    const struct slot *last; /* the slot whose front stands in `key` right before the path; NULL: none */
    char host[WINDROW_URL_BYTES_MAX + 1];
    char key[FRONT_ROOM + PATH_ROOM];
};

enum windrow_status windrow_keyer_create(struct windrow_keyer **keyer)
{
    *keyer = calloc(1, sizeof **keyer);
    return *keyer != NULL ? WINDROW_OK : windrow_fail(WINDROW_RESOURCE, "no memory for reading URLs");
}

void windrow_keyer_destroy(struct windrow_keyer *keyer)
{
    free(keyer);
}

/* Sixteen bytes at a time, in the compiler's portable vectors. */
typedef signed char bytes16 __attribute__((vector_size(16)));

static inline bytes16 load16(const char *from)
{
    bytes16 bytes;
    memcpy(&bytes, from, sizeof bytes);
    return bytes;
}

static inline bool any16(bytes16 bytes)
{
    uint64_t halves[2];
    memcpy(halves, &bytes, sizeof halves);
    return (halves[0] | halves[1]) != 0;
}

/* Marks the bytes that are no windrow_url_path_byte(): '%' and '#' among them, and, signed, all above ASCII. */
static inline bytes16 odd16(bytes16 bytes)
{
    return (bytes <= ' ') | (bytes == '"') | (bytes == '#') | (bytes == '%') | (bytes == '<') | (bytes == '>') |
           ((bytes >= '[') & (bytes <= '^')) | (bytes == '`') | ((bytes >= '{') & (bytes != '~'));
}

/* Copies a path and query that is in normal form already. False, with `out` undefined, for any other and
 * for some that would be (those with an escape, and with a dot behind a slash). `text` starts with '/'. */
static bool clean_path_copy(const char *text, size_t bytes, char *out)
{
    bytes16 odd = {0};
    if (bytes < 17) {
        char padded[33];
        memset(padded, '/', sizeof padded);
        memcpy(padded, text, bytes);
        bytes16 here = load16(padded), next = load16(padded + 1);
        odd = odd16(here) | odd16(next) | ((here == '/') & (next == '.'));
        memcpy(out, text, bytes);
        return !any16(odd);
    }
    size_t last = bytes - 17;
    for (size_t at = 0;; at += 16) {
        /* The last step overlaps the one before, so that nothing behind the text is read. */
        if (at > last)
            at = last;
        bytes16 here = load16(text + at), next = load16(text + at + 1);
        odd |= odd16(next) | ((here == '/') & (next == '.'));
        memcpy(out + at, &here, sizeof here);
        if (at == last)
            break;
    }
    out[bytes - 1] = text[bytes - 1];
    return !any16(odd);
}

/* The bytes of the scheme and authority of a trimmed text that begins with "http://" or "https://" in
 * lower case; 0 for any other. */
static size_t authority_bytes(const char *text, size_t bytes)
{
    size_t at;
    if (bytes > 8 && memcmp(text, "https://", 8) == 0)
        at = 8;
    else if (bytes > 7 && memcmp(text, "http://", 7) == 0)
        at = 7;
    else
        return 0;
    while (at < bytes && text[at] != '/' && text[at] != '?' && text[at] != '#')
        at++;
    return at;
}

static bool slot_holds(const struct slot *slot, const char *text, size_t text_bytes)
{
    return slot->text_bytes == text_bytes && memcmp(slot->text, text, text_bytes) == 0;
}

/* Puts the path behind the front that stands before `path`, and gives the key out. */
static enum windrow_url_verdict key_finish(struct windrow_keyer *keyer, const char *text, size_t bytes,
                                           size_t front_bytes, size_t url_bytes, const char **key, size_t *key_bytes)
{
    char *path = keyer->key + FRONT_ROOM;
    size_t path_bytes = bytes;
    if (bytes == 0 || text[0] != '/' || !clean_path_copy(text, bytes, path))
        path_bytes = windrow_url_path(text, bytes, path);
    if (url_bytes + path_bytes > WINDROW_URL_BYTES_MAX)
        return WINDROW_URL_MALFORMED;
    *key = path - front_bytes;
    *key_bytes = front_bytes + path_bytes;
    return WINDROW_URL_OK;
}

enum windrow_url_verdict windrow_keyer_key(struct windrow_keyer *keyer, const char *text, size_t bytes,
                                           const char **key, size_t *key_bytes)
{
    windrow_url_trim(&text, &bytes);
    if (bytes > WINDROW_URL_BYTES_MAX)
        return WINDROW_URL_MALFORMED;
    char *path = keyer->key + FRONT_ROOM;

    const struct slot *last = keyer->last;
    if (last != NULL && bytes > last->text_bytes && text[last->text_bytes] == '/' &&
        memcmp(text, last->text, last->text_bytes) == 0)
        return key_finish(keyer, text + last->text_bytes, bytes - last->text_bytes, last->front_bytes, last->url_bytes,
                          key, key_bytes);

    size_t text_bytes = authority_bytes(text, bytes);
    bool short_enough = text_bytes > 0 && text_bytes <= SLOT_TEXT_BYTES;
    struct slot *slot = short_enough ? &keyer->slots[XXH3_64bits(text, text_bytes) % SLOTS] : NULL;
    if (slot == NULL || !slot_holds(slot, text, text_bytes)) {
        struct windrow_url_front front;
        enum windrow_url_verdict verdict = windrow_url_front(text, bytes, &front, keyer->host);
        if (verdict != WINDROW_URL_OK)
            return verdict;
        size_t front_bytes = front.host_bytes + (front.with_port ? 4 : 2);
        keyer->last = NULL;
        windrow_key_front(&front, keyer->host, path - front_bytes);
        size_t url_bytes = windrow_url_length(&front, 0);
        if (slot != NULL && front_bytes <= sizeof slot->front) {
            slot->text_bytes = (uint32_t)text_bytes;
            slot->front_bytes = (uint32_t)front_bytes;
            slot->url_bytes = (uint32_t)url_bytes;
            memcpy(slot->text, text, text_bytes);
            memcpy(slot->front, path - front_bytes, front_bytes);
            keyer->last = slot;
        }
        return key_finish(keyer, text + front.text_bytes, bytes - front.text_bytes, front_bytes, url_bytes, key,
                          key_bytes);
    }
    memcpy(path - slot->front_bytes, slot->front, slot->front_bytes);
    keyer->last = slot;
    return key_finish(keyer, text + text_bytes, bytes - text_bytes, slot->front_bytes, slot->url_bytes, key, key_bytes);
}
