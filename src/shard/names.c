#include "shard/names.h"

#include "base/file.h"
#include "dump/reader.h"
#include "shard/sorter.h"
#include "url/domain.h"
#include "url/keyer.h"

#include <stdlib.h>
#include <string.h>
#include <xxhash.h>

#define SAMPLE_HOSTS 1000
#define SAMPLE_BYTES ((size_t)4 << 20)

/* The beginning of a file, kept until it is known how its host names are to be read. */
struct sample {
    struct windrow_buffer texts; /* struct name, then its bytes */
    size_t hosts;
    uint64_t ends_known, begins_known;   /* host names whose last, first label is a known top-level domain */
    uint64_t first_labels[2 * SAMPLE_HOSTS], last_labels[2 * SAMPLE_HOSTS]; /* sets of hashes; 0: free */
    uint64_t first_count, last_count;
};

struct build {
    struct windrow_sorter *sorter;
    struct windrow_keyer *keyer;
    struct windrow_names_facts *facts;
    struct windrow_buffer url;
    struct sample sample;
    bool sampling;
};

static enum windrow_status memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for the names; try a smaller --memory");
}

char *windrow_names_path(const char *scratch)
{
    return windrow_path(scratch, "names");
}

void windrow_names_key(uint64_t id, char key[WINDROW_NAMES_KEY_BYTES])
{
    uint64_t swapped = __builtin_bswap64(id);
    key[0] = 0;
    memcpy(key + 1, &swapped, sizeof swapped);
}

uint64_t windrow_names_id(const char key[WINDROW_NAMES_KEY_BYTES])
{
    uint64_t swapped;
    memcpy(&swapped, key + 1, sizeof swapped);
    return __builtin_bswap64(swapped);
}

bool windrow_names_number(const char *text, size_t bytes, uint64_t *number)
{
    uint64_t value = 0;
    for (size_t at = 0; at < bytes; at++) {
        unsigned digit = (unsigned char)text[at] - (unsigned)'0';
        if (digit > 9 || __builtin_mul_overflow(value, 10, &value) || __builtin_add_overflow(value, digit, &value))
            return false;
    }
    *number = value;
    return bytes > 0;
}

static bool is_blank(char byte)
{
    return byte == ' ' || (byte >= '\t' && byte <= '\r');
}

static bool is_address(const char *host, size_t bytes)
{
    for (size_t at = 0; at < bytes; at++)
        if (host[at] != '.' && (host[at] < '0' || host[at] > '9'))
            return bytes > 0 && host[0] == '[';
    return true;
}

/* ---- Which way round ---- */

static void label_add(uint64_t *set, uint64_t *count, const char *label, size_t bytes)
{
    uint64_t hash = XXH3_64bits(label, bytes) | 1;
    size_t at = hash % (2 * SAMPLE_HOSTS);
    while (set[at] && set[at] != hash)
        at = (at + 1) % (2 * SAMPLE_HOSTS);
    *count += !set[at];
    set[at] = hash;
}

static bool label_known(const char *label, size_t bytes)
{
    char text[64];
    if (!bytes || bytes >= sizeof text)
        return false;
    for (size_t at = 0; at < bytes; at++)
        text[at] = label[at] >= 'A' && label[at] <= 'Z' ? (char)(label[at] + 32) : label[at];
    text[bytes] = 0;
    return windrow_domain_top_level(text);
}

static void sample_host(struct sample *sample, const char *host, size_t bytes)
{
    while (bytes && host[bytes - 1] == '.')
        bytes--;
    const char *first_end = memchr(host, '.', bytes);
    if (!first_end || is_address(host, bytes))
        return;
    const char *last = (const char *)memrchr(host, '.', bytes) + 1;
    size_t first_bytes = (size_t)(first_end - host), last_bytes = (size_t)(host + bytes - last);
    sample->hosts++;
    sample->begins_known += label_known(host, first_bytes);
    sample->ends_known += label_known(last, last_bytes);
    label_add(sample->first_labels, &sample->first_count, host, first_bytes);
    label_add(sample->last_labels, &sample->last_count, last, last_bytes);
}

static bool sample_reversed(const struct sample *sample)
{
    if (sample->ends_known != sample->begins_known)
        return sample->begins_known > sample->ends_known;
    return sample->first_count < sample->last_count;
}

/* ---- Lines ---- */

/* A name that is a host, in its usual order, becomes a URL in build->url. */
static enum windrow_status host_url(struct build *build, const char *host, size_t bytes)
{
    enum windrow_status status = windrow_buffer_append(&build->url, "http://", 7);
    if (status)
        return status;
    if (!build->facts->reversed || is_address(host, bytes))
        return windrow_buffer_append(&build->url, host, bytes);
    for (size_t end = bytes; !status;) {
        const char *dot = end ? memrchr(host, '.', end) : NULL;
        size_t begin = dot ? (size_t)(dot - host) + 1 : 0;
        status = windrow_buffer_append(&build->url, host + begin, end - begin);
        if (!dot || status)
            break;
        status = windrow_buffer_append(&build->url, ".", 1);
        end = begin - 1;
    }
    return status;
}

static bool is_url(const char *name, size_t bytes)
{
    return memmem(name, bytes, "://", 3) != NULL;
}

static enum windrow_status take_name(struct build *build, uint64_t id, const char *name, size_t bytes)
{
    enum windrow_status status;
    const char *key = NULL;
    size_t key_bytes = 0;
    bool host = !is_url(name, bytes), usable = true;
    build->url.bytes = 0;
    for (size_t at = 0; host && at < bytes; at++)
        usable = usable && !strchr("/?#@", name[at]);
    if (host && usable && bytes <= WINDROW_URL_BYTES_MAX) {
        if ((status = host_url(build, name, bytes)))
            return status;
        name = (const char *)build->url.data;
        bytes = build->url.bytes;
    }
    enum windrow_url_verdict verdict = windrow_keyer_key(build->keyer, name, bytes, &key, &key_bytes);
    if (verdict == WINDROW_URL_MEMORY)
        return memory();
    if (verdict == WINDROW_URL_MALFORMED || !usable) {
        build->facts->bad_lines++;
        return WINDROW_OK;
    }
    char id_key[WINDROW_NAMES_KEY_BYTES];
    windrow_names_key(id, id_key);
    struct windrow_record record = {(const uint8_t *)id_key, sizeof id_key, (const uint8_t *)key, verdict == WINDROW_URL_OK ? key_bytes : 0};
    return windrow_sorter_put(build->sorter, &record);
}

struct name {
    uint64_t id;
    uint64_t bytes;
};

/* Decides by the sample, and takes its names. */
static enum windrow_status end_sample(struct build *build)
{
    enum windrow_status status = WINDROW_OK;
    build->sampling = false;
    build->facts->reversed = sample_reversed(&build->sample);
    struct windrow_buffer *texts = &build->sample.texts;
    for (size_t at = 0; !status && at < texts->bytes;) {
        struct name name;
        memcpy(&name, texts->data + at, sizeof name);
        status = take_name(build, name.id, (const char *)texts->data + at + sizeof name, name.bytes);
        at += sizeof name + name.bytes;
    }
    windrow_buffer_free(texts);
    return status;
}

static enum windrow_status take_line(struct build *build, struct windrow_dump_line *line)
{
    enum windrow_status status;
    struct windrow_dump_target target = {0};
    const char *text = line->source;
    size_t id_bytes = 0;
    while (id_bytes < line->source_bytes && !is_blank(text[id_bytes]))
        id_bytes++;
    if (id_bytes < line->source_bytes) {
        /* White space instead of a TAB. */
        target.text = text + id_bytes;
        while (is_blank(*target.text))
            target.text++;
        while (target.text + target.bytes < text + line->source_bytes && !is_blank(target.text[target.bytes]))
            target.bytes++;
    } else {
        windrow_dump_line_target(line, &target);
    }
    uint64_t id;
    if (!target.bytes || !windrow_names_number(text, id_bytes, &id)) {
        build->facts->bad_lines++;
        return WINDROW_OK;
    }
    if (!build->sampling)
        return take_name(build, id, target.text, target.bytes);
    struct sample *sample = &build->sample;
    struct name name = {id, target.bytes};
    if ((status = windrow_buffer_append(&sample->texts, &name, sizeof name)) ||
        (status = windrow_buffer_append(&sample->texts, target.text, target.bytes)))
        return status;
    if (!is_url(target.text, target.bytes))
        sample_host(sample, target.text, target.bytes);
    return sample->hosts == SAMPLE_HOSTS || sample->texts.bytes >= SAMPLE_BYTES ? end_sample(build) : WINDROW_OK;
}

static enum windrow_status read_file(struct build *build, const char *file, struct windrow_meter *meter)
{
    struct windrow_dump *dump = NULL;
    struct windrow_dump_chunk chunk = {0};
    const char *const paths[] = {file};
    struct windrow_dump_options options = {.paths = paths, .path_count = 1, .shape = WINDROW_DUMP_LISTS};
    enum windrow_status status = windrow_dump_open(&options, NULL, &dump);
    while (!status && !(status = windrow_dump_read(dump, &chunk)) && chunk.bytes) {
        struct windrow_dump_lines lines;
        struct windrow_dump_line line;
        uint64_t count = 0;
        windrow_dump_lines_begin(&lines, &chunk);
        for (; !status && windrow_dump_lines_next(&lines, &line); count++)
            if (!line.continued)
                status = take_line(build, &line);
        if (meter)
            windrow_meter_add(meter, count);
        if (!status && meter && windrow_meter_stopping(meter))
            status = windrow_fail(WINDROW_STOPPED, "stopped while reading the names; run the same command again to go on");
    }
    if (!status && build->sampling)
        status = end_sample(build);
    windrow_dump_chunk_free(&chunk);
    windrow_dump_close(dump);
    return status;
}

/* Writes each id once: with its smallest page key, or as another scheme's when it has no page. */
static enum windrow_status write_table(struct build *build, const char *path)
{
    struct windrow_records_writer out = {.frames.writer.descriptor = -1};
    struct windrow_record record;
    struct windrow_buffer kept = {0};  /* key, then value, of the record to be written */
    bool ended = false;
    enum windrow_status status = windrow_records_writer_open(&out, path);
    while (!status && !(status = windrow_sorter_next(build->sorter, &record, &ended))) {
        bool same = !ended && kept.bytes && memcmp(kept.data, record.key, WINDROW_NAMES_KEY_BYTES) == 0;
        if (same && kept.bytes > WINDROW_NAMES_KEY_BYTES)
            continue;
        if (!same && kept.bytes) {
            struct windrow_record whole = {kept.data, WINDROW_NAMES_KEY_BYTES, kept.data + WINDROW_NAMES_KEY_BYTES, kept.bytes - WINDROW_NAMES_KEY_BYTES};
            build->facts->count++;
            build->facts->key_bytes += whole.value_bytes;
            if ((status = windrow_records_put(&out, &whole)))
                break;
        }
        if (ended)
            break;
        kept.bytes = 0;
        if (!(status = windrow_buffer_append(&kept, record.key, record.key_bytes)))
            status = windrow_buffer_append(&kept, record.value, record.value_bytes);
    }
    if (!status)
        status = windrow_records_writer_finish(&out, true);
    windrow_records_writer_abandon(&out);
    windrow_buffer_free(&kept);
    return status;
}

enum windrow_status windrow_names_build(const char *file, const char *scratch, uint64_t memory_bytes, struct windrow_meter *meter,
                                        struct windrow_names_facts *facts)
{
    *facts = (struct windrow_names_facts){0};
    struct build *build = calloc(1, sizeof *build);
    char *path = windrow_names_path(scratch);
    enum windrow_status status = build && path ? windrow_sorter_create(scratch, "names", memory_bytes, &build->sorter) : memory();
    if (!status) {
        build->facts = facts;
        build->sampling = true;
        status = windrow_keyer_create(&build->keyer);
    }
    if (!status)
        status = read_file(build, file, meter);
    if (!status)
        status = write_table(build, path);
    if (build) {
        windrow_sorter_destroy(build->sorter);
        windrow_keyer_destroy(build->keyer);
        windrow_buffer_free(&build->url);
        windrow_buffer_free(&build->sample.texts);
    }
    free(build);
    free(path);
    return status ? windrow_fail_within(status, "reading the names") : WINDROW_OK;
}
