#include "shard/part.h"

#include "base/varint.h"
#include "shard/sealed.h"

#include <stdlib.h>
#include <string.h>

/* Merging uses a tournament tree whose nodes remember the loser and how long a prefix it shares with the
 * winner that it lost to (LCP-aware multiway merging, Ng & Kakehi 2008). Keys of one host share long prefixes;
 * with the shared lengths at hand, most comparisons look at one number instead of the keys. */
struct entrant {
    struct windrow_keyrun_reader reader;
    size_t shared;                 /* with the winner it was last compared with */
    struct windrow_buffer map;
    uint64_t last_page;            /* of its map: page number + 1 of the entry before */
    uint64_t last_core;
};

struct tournament {
    struct entrant *entrants;
    uint64_t entrant_count;
    uint64_t leaf_count;           /* a power of two */
    uint64_t *losers;              /* node 1 … leaf_count − 1; UINT64_MAX: nobody */
    uint64_t winner;
};

/* True when a goes before b; sets the loser's shared length to what it shares with the winner. */
static bool goes_first(struct tournament *tournament, uint64_t a, uint64_t b)
{
    if (a == UINT64_MAX || b == UINT64_MAX)
        return b == UINT64_MAX;
    struct entrant *left = &tournament->entrants[a], *right = &tournament->entrants[b];
    if (left->reader.ended || right->reader.ended)
        return right->reader.ended;
    if (left->shared != right->shared)
        return left->shared > right->shared;
    const struct windrow_buffer *left_key = &left->reader.key, *right_key = &right->reader.key;
    size_t shared = windrow_keyrun_shared(left_key->data, left_key->bytes, right_key->data, right_key->bytes, left->shared);
    bool first;
    if (shared == left_key->bytes)
        first = left_key->bytes < right_key->bytes || a < b;
    else if (shared == right_key->bytes)
        first = false;
    else
        first = left_key->data[shared] < right_key->data[shared];
    if (first)
        right->shared = shared;
    else
        left->shared = shared;
    return first;
}

static uint64_t play(struct tournament *tournament, uint64_t node)
{
    if (node >= tournament->leaf_count) {
        uint64_t entrant = node - tournament->leaf_count;
        return entrant < tournament->entrant_count ? entrant : UINT64_MAX;
    }
    uint64_t a = play(tournament, 2 * node), b = play(tournament, 2 * node + 1);
    bool first = goes_first(tournament, a, b);
    tournament->losers[node] = first ? b : a;
    return first ? a : b;
}

static void replay(struct tournament *tournament)
{
    uint64_t candidate = tournament->winner;
    for (uint64_t node = (candidate + tournament->leaf_count) / 2; node; node /= 2) {
        uint64_t other = tournament->losers[node];
        if (!goes_first(tournament, candidate, other)) {
            tournament->losers[node] = candidate;
            candidate = other;
        }
    }
    tournament->winner = candidate;
}

static const uint8_t *plan_key(const struct windrow_part_plan *plan, uint64_t part, size_t *bytes)
{
    *bytes = (size_t)(plan->key_at[part + 1] - plan->key_at[part]);
    return plan->keys.data + plan->key_at[part];
}

static int mark_order(const void *a, const void *b)
{
    const struct windrow_keyrun_mark *left = a, *right = b;
    return windrow_keyrun_compare(left->key, left->key_bytes, right->key, right->key_bytes);
}

static char *run_path(const char *scratch, uint64_t run)
{
    return windrow_path(scratch, "batch-%06llu.keys", (unsigned long long)run);
}

static enum windrow_status path_memory(void)
{
    return windrow_fail(WINDROW_RESOURCE, "out of memory for a path");
}

enum windrow_status windrow_part_plan(const char *scratch, uint64_t run_count, struct windrow_part_plan *plan)
{
    *plan = (struct windrow_part_plan){0};
    enum windrow_status status = WINDROW_OK;
    struct windrow_keyrun_index *indexes = calloc(run_count + 1, sizeof *indexes);
    struct windrow_keyrun_mark *marks = NULL;
    size_t mark_count = 0;
    if (!indexes)
        return path_memory();
    for (uint64_t run = 0; run < run_count; run++) {
        char *path = run_path(scratch, run);
        status = path ? windrow_keyrun_index_load(path, &indexes[run]) : path_memory();
        free(path);
        if (status)
            goto out;
        mark_count += indexes[run].mark_count;
    }
    marks = malloc((mark_count + 1) * sizeof *marks);
    if (!marks) {
        status = path_memory();
        goto out;
    }
    mark_count = 0;
    uint64_t sample_entries = 0; /* a frame's entries, on average */
    for (uint64_t run = 0; run < run_count; run++) {
        for (size_t index = 0; index < indexes[run].mark_count; index++)
            marks[mark_count++] = indexes[run].marks[index];
        if (indexes[run].mark_count)
            sample_entries += indexes[run].marks[indexes[run].mark_count - 1].first_entry;
    }
    sample_entries = mark_count ? sample_entries / mark_count + 1 : 1;
    qsort(marks, mark_count, sizeof *marks, mark_order);
    size_t step = WINDROW_PART_ENTRIES / sample_entries + 1;
    plan->key_at = calloc(mark_count / step + 3, sizeof *plan->key_at);
    if (!plan->key_at) {
        status = path_memory();
        goto out;
    }
    /* key_at[p] … key_at[p+1] spans the key that part p begins with; part 0's is empty. */
    plan->part_count = 1;
    const struct windrow_keyrun_mark *before = NULL;
    for (size_t index = step; index < mark_count; index += step) {
        if (before && mark_order(before, &marks[index]) == 0)
            continue;
        before = &marks[index];
        if ((status = windrow_buffer_append(&plan->keys, before->key, before->key_bytes)))
            goto out;
        plan->key_at[++plan->part_count] = plan->keys.bytes;
    }
out:
    for (uint64_t run = 0; run < run_count; run++)
        windrow_keyrun_index_free(&indexes[run]);
    free(indexes);
    free(marks);
    if (status)
        windrow_part_plan_free(plan);
    return status;
}

void windrow_part_plan_free(struct windrow_part_plan *plan)
{
    windrow_buffer_free(&plan->keys);
    free(plan->key_at);
    *plan = (struct windrow_part_plan){0};
}

/* Brings a run's reader to its first key that is not before `low`. */
static enum windrow_status enter(struct entrant *entrant, const char *path, const uint8_t *low, size_t low_bytes)
{
    struct windrow_keyrun_index index = {0};
    enum windrow_status status = windrow_keyrun_reader_open(&entrant->reader, path);
    if (status)
        return status;
    if ((status = windrow_keyrun_index_load(path, &index)))
        return status;
    size_t begin = 0, end = index.mark_count;
    while (begin < end) { /* the first mark that is not before low */
        size_t middle = (begin + end) / 2;
        if (windrow_keyrun_compare(index.marks[middle].key, index.marks[middle].key_bytes, low, low_bytes) < 0)
            begin = middle + 1;
        else
            end = middle;
    }
    if (index.mark_count)
        windrow_keyrun_seek(&entrant->reader, &index.marks[begin ? begin - 1 : 0]);
    windrow_keyrun_index_free(&index);
    do
        status = windrow_keyrun_next(&entrant->reader);
    while (!status && !entrant->reader.ended &&
           windrow_keyrun_compare(entrant->reader.key.data, entrant->reader.key.bytes, low, low_bytes) < 0);
    entrant->shared = 0;
    return status;
}

static enum windrow_status put_map(struct entrant *entrant, uint64_t page, bool core, uint64_t core_number)
{
    enum windrow_status status = windrow_buffer_reserve(&entrant->map, 2 * WINDROW_VARINT_BYTES_MAX);
    if (status)
        return status;
    uint8_t *out = entrant->map.data + entrant->map.bytes;
    out = windrow_varint_put(out, (page - entrant->last_page) * 2 + core);
    entrant->last_page = page + 1;
    if (core) {
        out = windrow_varint_put(out, core_number - entrant->last_core);
        entrant->last_core = core_number + 1;
    }
    entrant->map.bytes = (size_t)(out - entrant->map.data);
    return WINDROW_OK;
}

/* Merges until the keys reach `high`. */
static enum windrow_status merge(struct tournament *tournament, const uint8_t *high, size_t high_bytes, struct windrow_keyrun_writer *out,
                                 struct windrow_part_facts *facts)
{
    enum windrow_status status = WINDROW_OK;
    struct windrow_buffer key = {0};
    uint64_t *meeting = malloc((tournament->entrant_count + 1) * sizeof *meeting); /* runs that hold this page */
    if (!meeting)
        return path_memory();
    tournament->winner = play(tournament, 1);
    while (tournament->winner != UINT64_MAX) { /* nobody: there is no run at all */
        struct entrant *first = &tournament->entrants[tournament->winner];
        if (first->reader.ended)
            break;
        if (high && windrow_keyrun_compare(first->reader.key.data, first->reader.key.bytes, high, high_bytes) >= 0)
            break;
        size_t shared = first->shared < key.bytes ? first->shared : key.bytes;
        key.bytes = 0;
        if ((status = windrow_buffer_append(&key, first->reader.key.data, first->reader.key.bytes)))
            goto out;
        uint64_t meeting_count = 0, degree = 0;
        bool crawled = false;
        /* All entries of this key come one after another, lower runs first. */
        for (;;) {
            struct entrant *entrant = &tournament->entrants[tournament->winner];
            if (entrant->reader.ended || (meeting_count && !(entrant->shared == key.bytes && entrant->reader.key.bytes == key.bytes)))
                break;
            degree += entrant->reader.degree;
            crawled |= entrant->reader.crawled;
            meeting[meeting_count++] = tournament->winner;
            if ((status = windrow_keyrun_next(&entrant->reader)))
                goto out;
            entrant->shared = entrant->reader.shared;
            replay(tournament);
        }
        for (uint64_t index = 0; index < meeting_count; index++)
            if ((status = put_map(&tournament->entrants[meeting[index]], facts->pages, degree > 0, facts->core_pages)))
                goto out;
        if ((status = windrow_keyrun_put(out, key.data, key.bytes, shared, degree, crawled)))
            goto out;
        facts->pages++;
        facts->core_pages += degree > 0;
    }
out:
    free(meeting);
    windrow_buffer_free(&key);
    return status;
}

static enum windrow_status write_maps(const char *path, struct entrant *entrants, uint64_t run_count, uint64_t *offsets)
{
    struct windrow_frames_writer frames;
    enum windrow_status status = windrow_frames_writer_open(&frames, path);
    for (uint64_t run = 0; !status && run < run_count; run++) {
        offsets[run] = windrow_frames_offset(&frames);
        const uint8_t *at = entrants[run].map.data, *end = at + entrants[run].map.bytes;
        while (!status && at < end) {
            size_t bytes = (size_t)(end - at) < WINDROW_FRAME_BYTES ? (size_t)(end - at) : WINDROW_FRAME_BYTES;
            status = windrow_buffer_append(&frames.raw, at, bytes);
            if (!status)
                status = windrow_frames_cut(&frames);
            at += bytes;
        }
    }
    offsets[run_count] = windrow_frames_offset(&frames);
    if (!status)
        status = windrow_frames_writer_finish(&frames);
    windrow_frames_writer_abandon(&frames);
    return status;
}

enum windrow_status windrow_part_merge(const char *scratch, uint64_t run_count, const struct windrow_part_plan *plan, uint64_t part)
{
    enum windrow_status status = WINDROW_OK;
    struct tournament tournament = {.entrant_count = run_count, .leaf_count = 1};
    while (tournament.leaf_count < run_count)
        tournament.leaf_count *= 2;
    struct windrow_keyrun_writer out = {.frames.writer.descriptor = -1};
    char *path = windrow_path(scratch, "part-%06llu", (unsigned long long)part);
    char *maps_path = windrow_path(scratch, "part-%06llu.maps", (unsigned long long)part);
    char *facts_path = windrow_path(scratch, "part-%06llu.facts", (unsigned long long)part);
    tournament.entrants = calloc(run_count + 1, sizeof *tournament.entrants);
    tournament.losers = calloc(tournament.leaf_count + 1, sizeof *tournament.losers);
    struct windrow_buffer record = {0};
    if (!path || !maps_path || !facts_path || !tournament.entrants || !tournament.losers) {
        status = path_memory();
        goto out;
    }
    for (uint64_t run = 0; run < run_count; run++)
        tournament.entrants[run].reader.frames.descriptor = -1;
    size_t low_bytes, high_bytes = 0;
    const uint8_t *low = plan_key(plan, part, &low_bytes), *high = NULL;
    if (part + 1 < plan->part_count)
        high = plan_key(plan, part + 1, &high_bytes);
    for (uint64_t run = 0; run < run_count; run++) {
        char *entrant_path = run_path(scratch, run);
        status = entrant_path ? enter(&tournament.entrants[run], entrant_path, low, low_bytes) : path_memory();
        free(entrant_path);
        if (status)
            goto out;
    }
    if ((status = windrow_keyrun_writer_open(&out, path)))
        goto out;
    struct windrow_part_facts facts = {.run_count = run_count};
    if ((status = merge(&tournament, high, high_bytes, &out, &facts)))
        goto out;
    if ((status = windrow_keyrun_writer_finish(&out)))
        goto out;
    size_t offsets_bytes = (run_count + 1) * sizeof(uint64_t);
    if ((status = windrow_buffer_append(&record, &facts, sizeof facts)) || (status = windrow_buffer_reserve(&record, offsets_bytes)))
        goto out;
    uint64_t *offsets = calloc(run_count + 1, sizeof *offsets);
    status = offsets ? write_maps(maps_path, tournament.entrants, run_count, offsets) : path_memory();
    if (!status)
        status = windrow_buffer_append(&record, offsets, offsets_bytes);
    free(offsets);
    if (!status)
        status = windrow_sealed_replace(facts_path, record.data, record.bytes);
out:
    if (tournament.entrants)
        for (uint64_t run = 0; run < run_count; run++) {
            windrow_keyrun_reader_close(&tournament.entrants[run].reader);
            windrow_buffer_free(&tournament.entrants[run].map);
        }
    windrow_keyrun_writer_abandon(&out);
    windrow_buffer_free(&record);
    free(tournament.entrants);
    free(tournament.losers);
    free(path);
    free(maps_path);
    free(facts_path);
    return status;
}

static enum windrow_status facts_read(const char *scratch, uint64_t part, struct windrow_buffer *record, struct windrow_part_facts *facts)
{
    char *path = windrow_path(scratch, "part-%06llu.facts", (unsigned long long)part);
    if (!path)
        return path_memory();
    enum windrow_status status = windrow_sealed_load(path, record);
    if (!status) {
        if (record->bytes >= sizeof *facts)
            memcpy(facts, record->data, sizeof *facts);
        if (record->bytes < sizeof *facts || record->bytes != sizeof *facts + (facts->run_count + 1) * sizeof(uint64_t))
            status = windrow_fail(WINDROW_DAMAGED, "the scratch file %s is damaged; remove the unfinished store and shard again", path);
    }
    free(path);
    return status;
}

enum windrow_status windrow_part_facts_load(const char *scratch, uint64_t part, struct windrow_part_facts *facts)
{
    struct windrow_buffer record = {0};
    enum windrow_status status = facts_read(scratch, part, &record, facts);
    windrow_buffer_free(&record);
    return status;
}

enum windrow_status windrow_part_map_load(const char *scratch, uint64_t part_count, const uint64_t *page_bases, const uint64_t *core_bases,
                                          uint64_t run, uint64_t local_count, uint64_t *pages, uint64_t *cores)
{
    enum windrow_status status = WINDROW_OK;
    uint64_t local = 0;
    struct windrow_buffer record = {0}, map = {0};
    struct windrow_frames_reader frames = {.descriptor = -1};
    for (uint64_t part = 0; part < part_count; part++) {
        struct windrow_part_facts facts;
        char *path = windrow_path(scratch, "part-%06llu.maps", (unsigned long long)part);
        status = path ? facts_read(scratch, part, &record, &facts) : path_memory();
        if (!status && run >= facts.run_count)
            status = windrow_fail(WINDROW_BUG, "run %llu is unknown to %s", (unsigned long long)run, path);
        if (!status)
            status = windrow_frames_reader_open(&frames, path);
        free(path);
        if (status)
            goto out;
        uint64_t offsets[2];
        memcpy(offsets, record.data + sizeof facts + run * sizeof *offsets, sizeof offsets);
        windrow_frames_seek(&frames, offsets[0]);
        /* A number may straddle two frames, so the part's map is put together first. */
        map.bytes = 0;
        while (frames.offset < offsets[1]) {
            if ((status = windrow_frames_next(&frames)) || (status = windrow_buffer_append(&map, frames.raw.data, frames.raw.bytes)))
                goto out;
            if (!frames.raw.bytes) {
                status = windrow_frames_damaged(&frames);
                goto out;
            }
        }
        uint64_t page = page_bases[part], core = core_bases[part];
        const uint8_t *at = map.data, *end = at + map.bytes;
        while (at < end) {
            uint64_t gap, core_gap = 0;
            at = windrow_varint_get(at, end, &gap);
            if (at && (gap & 1))
                at = windrow_varint_get(at, end, &core_gap);
            if (!at || local >= local_count) {
                status = windrow_frames_damaged(&frames);
                goto out;
            }
            page += gap >> 1;
            pages[local] = page++;
            cores[local] = UINT64_MAX;
            if (gap & 1) {
                core += core_gap;
                cores[local] = core++;
            }
            local++;
        }
        windrow_frames_reader_close(&frames);
    }
    if (local != local_count)
        status = windrow_fail(WINDROW_DAMAGED, "the maps of batch %llu in %s hold %llu pages, not %llu; remove the unfinished store and shard again",
                              (unsigned long long)run, scratch, (unsigned long long)local, (unsigned long long)local_count);
out:
    windrow_frames_reader_close(&frames);
    windrow_buffer_free(&record);
    windrow_buffer_free(&map);
    return status;
}

uint64_t windrow_part_memory_bytes(uint64_t run_count)
{
    /* A decompressor, a raw and a compressed frame, a key, for each run; the maps; the writer. */
    return run_count * (400u << 10) + (uint64_t)WINDROW_PART_ENTRIES * 8 + (4u << 20);
}
