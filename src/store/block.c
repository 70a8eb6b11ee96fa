/* Payload of a block, little-endian (FORMAT.md says the same in words):
 *
 *   offset  size  what
 *        0     8  first target
 *        8     8  links
 *       16     8  base of the far lists      (the first source of the first non-empty one)
 *       24     8  base of the near lists     (the same)
 *       32     8  base of the runs           (the start of the first run)
 *       40     4  targets
 *       44     4  flags
 *       48    24  numbers in each stream, 4 bytes each
 *       72    24  data bytes of each stream, 4 bytes each
 *       96        the streams' control bytes, stream after stream, then their data bytes likewise
 *
 * Streams: far counts, near counts, run counts, far gaps, near gaps, runs. A number's two control bits
 * say how many data bytes it has: 0, 1, 2 and 4 (8 in a wide block); a number of 0 bytes is 0.
 * Splitting control and data follows Stepanov et al. 2011 ("SIMD-based decoding of posting lists");
 * a byte shuffle then decodes four numbers at once.
 */
#include "store/block.h"

#include <endian.h>
#include <stdlib.h>
#include <string.h>

#if defined(__x86_64__)
#include <immintrin.h>
#endif

enum { HEADER_BYTES = 96, STREAMS = 6 };

enum stream_name { FAR_COUNTS, NEAR_COUNTS, RUN_COUNTS, FAR_GAPS, NEAR_GAPS, RUNS };

/* ---- Encoding ------------------------------------------------------------------------------ */

struct numbers {
    uint64_t *values;
    uint64_t count;
};

/* Where the first source of the last non-empty list of a part stood. */
struct part {
    uint64_t base;
    uint64_t first;
    bool begun;
};

static uint64_t zigzag(uint64_t from, uint64_t to)
{
    int64_t difference = (int64_t)(to - from);
    return ((uint64_t)difference << 1) ^ (uint64_t)(difference >> 63);
}

static uint64_t unzigzag(uint64_t number)
{
    return (number >> 1) ^ (0 - (number & 1));
}

static void push(struct numbers *numbers, uint64_t value)
{
    numbers->values[numbers->count++] = value;
}

static uint64_t first_number(struct part *part, uint64_t first)
{
    if (!part->begun) {
        part->begun = true;
        part->base = part->first = first;
    }
    uint64_t number = zigzag(part->first, first);
    part->first = first;
    return number;
}

struct encoder {
    struct numbers streams[STREAMS];
    struct part far, near, run;
};

/* Splits one list into its parts. Runs are looked for among the sources in [run_first, run_end). */
static void encode_list(struct encoder *encoder, const uint64_t *sources, uint32_t count, uint64_t near_first,
                        uint64_t near_end, uint64_t run_first, uint64_t run_end)
{
    uint64_t far = 0, near = 0, runs = 0, last_far = 0, last_near = 0, last_run_end = 0;
    for (uint32_t i = 0; i < count;) {
        uint64_t source = sources[i];
        uint32_t length = 1;
        if (source >= run_first && source < run_end)
            while (i + length < count && sources[i + length] == source + length && source + length < run_end)
                length++;
        if (length >= WINDROW_RUN_LEAST) {
            push(&encoder->streams[RUNS], runs ? source - last_run_end : first_number(&encoder->run, source));
            push(&encoder->streams[RUNS], length - WINDROW_RUN_LEAST);
            last_run_end = source + length;
            runs++;
            i += length;
            continue;
        }
        for (uint32_t end = i + length; i < end; i++) {
            source = sources[i];
            if (source >= near_first && source < near_end) {
                push(&encoder->streams[NEAR_GAPS], near ? source - last_near - 1 : first_number(&encoder->near, source));
                last_near = source;
                near++;
            } else {
                push(&encoder->streams[FAR_GAPS], far ? source - last_far - 1 : first_number(&encoder->far, source));
                last_far = source;
                far++;
            }
        }
    }
    push(&encoder->streams[FAR_COUNTS], far);
    push(&encoder->streams[NEAR_COUNTS], near);
    push(&encoder->streams[RUN_COUNTS], runs);
}

static unsigned number_code(uint64_t number)
{
    return number == 0 ? 0 : number < 0x100 ? 1 : number < 0x10000 ? 2 : 3;
}

static const uint8_t narrow_bytes[4] = {0, 1, 2, 4}, wide_bytes[4] = {0, 1, 2, 8};

/* Writes the numbers' control bytes to `control` and their data to `data`; returns the data's end. */
static uint8_t *write_stream(const struct numbers *numbers, const uint8_t *code_bytes, uint8_t *control, uint8_t *data)
{
    memset(control, 0, (numbers->count + 3) / 4);
    for (uint64_t i = 0; i < numbers->count; i++) {
        uint64_t value = htole64(numbers->values[i]);
        unsigned code = number_code(numbers->values[i]);
        control[i / 4] |= (uint8_t)(code << (2 * (i % 4)));
        memcpy(data, &value, code_bytes[code]);
        data += code_bytes[code];
    }
    return data;
}

static void put64(uint8_t *at, uint64_t value)
{
    value = htole64(value);
    memcpy(at, &value, 8);
}

static void put32(uint8_t *at, uint32_t value)
{
    value = htole32(value);
    memcpy(at, &value, 4);
}

static enum windrow_status write_payload(struct encoder *encoder, const struct windrow_block_input *input,
                                         uint64_t link_count, struct windrow_buffer *out)
{
    uint64_t largest = 0, control_bytes = 0, number_count = 0;
    for (int s = 0; s < STREAMS; s++) {
        struct numbers *numbers = &encoder->streams[s];
        uint64_t together = 0;
        for (uint64_t i = 0; i < numbers->count; i++)
            together |= numbers->values[i];
        largest |= together;
        if (s <= RUN_COUNTS && together == 0)
            numbers->count = 0;
        control_bytes += (numbers->count + 3) / 4;
        number_count += numbers->count;
    }
    uint32_t flags = input->flags & (uint32_t)~WINDROW_BLOCK_WIDE;
    if (largest >> 32)
        flags |= WINDROW_BLOCK_WIDE;
    const uint8_t *code_bytes = flags & WINDROW_BLOCK_WIDE ? wide_bytes : narrow_bytes;
    enum windrow_status status = windrow_buffer_reserve(out, HEADER_BYTES + control_bytes + number_count * code_bytes[3]);
    if (status)
        return status;
    uint8_t *header = out->data + out->bytes, *control = header + HEADER_BYTES, *data = control + control_bytes;
    put64(header, input->first_target);
    put64(header + 8, link_count);
    put64(header + 16, encoder->far.base);
    put64(header + 24, encoder->near.base);
    put64(header + 32, encoder->run.base);
    put32(header + 40, input->target_count);
    put32(header + 44, flags);
    for (int s = 0; s < STREAMS; s++) {
        const struct numbers *numbers = &encoder->streams[s];
        uint8_t *end = write_stream(numbers, code_bytes, control, data);
        put32(header + 48 + 4 * s, (uint32_t)numbers->count);
        put32(header + 72 + 4 * s, (uint32_t)(end - data));
        control += (numbers->count + 3) / 4;
        data = end;
    }
    out->bytes = (size_t)(data - out->data);
    return WINDROW_OK;
}

enum windrow_status windrow_block_encode(const struct windrow_block_input *input, struct windrow_buffer *out)
{
    uint64_t link_count = 0, targets = input->target_count;
    for (uint64_t t = 0; t < targets; t++)
        link_count += input->counts[t];
    /* Stream sizes are 32 bits wide; a block of usual size is thousands of times smaller. */
    if (link_count > UINT32_MAX / 16 || targets > UINT32_MAX / 16 || targets == 0)
        return windrow_fail(WINDROW_BUG, "a block of %llu targets and %llu links cannot be coded",
                            (unsigned long long)targets, (unsigned long long)link_count);
    /* Lists in three parts: far and near gaps share no link; a run takes two numbers for eight links or more. */
    uint64_t run_numbers = link_count / WINDROW_RUN_LEAST * 2;
    uint64_t room[STREAMS] = {targets, targets, targets, link_count, link_count, run_numbers}, total = 0;
    for (int s = 0; s < STREAMS; s++)
        total += room[s];
    uint64_t *memory = malloc(total * sizeof *memory);
    if (!memory)
        return windrow_fail(WINDROW_RESOURCE, "out of memory: %llu bytes to code a block", (unsigned long long)(total * 8));
    struct encoder encoder = {0};
    for (uint64_t s = 0, at = 0; s < STREAMS; at += room[s++])
        encoder.streams[s].values = memory + at;
    bool anywhere = input->kind == WINDROW_BLOCK_RIM || input->flags & WINDROW_BLOCK_PIECE;
    const uint64_t *sources = input->sources;
    for (uint64_t t = 0; t < targets; t++) {
        uint64_t near_first = anywhere ? 0 : input->near_first[t], near_end = anywhere ? 0 : input->near_end[t];
        encode_list(&encoder, sources, input->counts[t], near_first, near_end, near_first, anywhere ? UINT64_MAX : near_end);
        sources += input->counts[t];
    }
    enum windrow_status status = write_payload(&encoder, input, link_count, out);
    free(memory);
    return status;
}

/* ---- Parsing ------------------------------------------------------------------------------- */

static uint64_t get64(const uint8_t *at)
{
    uint64_t value;
    memcpy(&value, at, 8);
    return le64toh(value);
}

static uint32_t get32(const uint8_t *at)
{
    uint32_t value;
    memcpy(&value, at, 4);
    return le32toh(value);
}

static enum windrow_status damaged(const struct windrow_block_record *record, const char *what)
{
    return windrow_fail(WINDROW_DAMAGED, "the block of targets %llu and following (segment %u, byte %llu) is damaged: %s",
                        (unsigned long long)record->first_target, record->segment, (unsigned long long)record->offset, what);
}

uint32_t windrow_block_payload_flags(const uint8_t *payload)
{
    return get32(payload + 44);
}

enum windrow_status windrow_block_parse(const uint8_t *payload, size_t payload_bytes,
                                        const struct windrow_block_record *record, struct windrow_block *block)
{
    if (payload_bytes < HEADER_BYTES)
        return damaged(record, "it is shorter than its header");
    if (get64(payload) != record->first_target || get64(payload + 8) != record->link_count ||
        get32(payload + 40) != record->target_count || get32(payload + 44) != record->flags)
        return damaged(record, "its header is not what the manifest says of it");
    *block = (struct windrow_block){
        .first_target = record->first_target,
        .target_count = record->target_count,
        .flags = record->flags,
        .far_base = get64(payload + 16),
        .near_base = get64(payload + 24),
        .run_base = get64(payload + 32),
    };
    struct windrow_stream *streams[STREAMS] = {&block->far_counts, &block->near_counts, &block->run_counts,
                                               &block->far_gaps, &block->near_gaps, &block->runs};
    uint64_t control_bytes = 0, data_bytes = 0;
    for (int s = 0; s < STREAMS; s++) {
        streams[s]->count = get32(payload + 48 + 4 * s);
        streams[s]->data_bytes = get32(payload + 72 + 4 * s);
        if (s <= RUN_COUNTS && streams[s]->count != 0 && streams[s]->count != record->target_count)
            return damaged(record, "it has counts for some of its targets only");
        control_bytes += ((uint64_t)streams[s]->count + 3) / 4;
        data_bytes += streams[s]->data_bytes;
    }
    if (HEADER_BYTES + control_bytes + data_bytes != payload_bytes)
        return damaged(record, "its parts do not add up to its size");
    if (record->flags & WINDROW_BLOCK_PIECE && record->target_count != 1)
        return damaged(record, "it is a piece of more than one list");
    if ((uint64_t)streams[FAR_GAPS]->count + streams[NEAR_GAPS]->count > record->link_count ||
        (uint64_t)streams[RUNS]->count / 2 * WINDROW_RUN_LEAST > record->link_count || streams[RUNS]->count % 2)
        return damaged(record, "it has more numbers than links");
    const uint8_t *control = payload + HEADER_BYTES, *data = control + control_bytes;
    for (int s = 0; s < STREAMS; s++) {
        streams[s]->control = control;
        streams[s]->data = data;
        control += (streams[s]->count + 3) / 4;
        data += streams[s]->data_bytes;
    }
    return WINDROW_OK;
}

/* ---- Decoding numbers ---------------------------------------------------------------------- */

/* Numbers that the data does not reach are 0: damage is for the caller to notice by its sums. */
void windrow_stream_decode_plain(const struct windrow_stream *stream, uint32_t *numbers)
{
    const uint8_t *data = stream->data, *end = data + stream->data_bytes;
    for (uint32_t i = 0; i < stream->count; i++) {
        unsigned bytes = narrow_bytes[stream->control[i / 4] >> (2 * (i % 4)) & 3];
        uint32_t value = 0;
        if (bytes <= (size_t)(end - data)) {
            memcpy(&value, data, bytes);
            data += bytes;
        } else {
            data = end;
        }
        numbers[i] = le32toh(value);
    }
}

void windrow_stream_decode_wide(const struct windrow_stream *stream, uint64_t *numbers)
{
    const uint8_t *data = stream->data, *end = data + stream->data_bytes;
    for (uint32_t i = 0; i < stream->count; i++) {
        unsigned bytes = wide_bytes[stream->control[i / 4] >> (2 * (i % 4)) & 3];
        uint64_t value = 0;
        if (bytes <= (size_t)(end - data)) {
            memcpy(&value, data, bytes);
            data += bytes;
        } else {
            data = end;
        }
        numbers[i] = le64toh(value);
    }
}

#if defined(__x86_64__)

static uint8_t shuffles[256][16] __attribute__((aligned(64)));
static uint8_t shuffle_bytes[256];

__attribute__((constructor)) static void fill_shuffles(void)
{
    for (unsigned control = 0; control < 256; control++) {
        uint8_t from = 0;
        for (unsigned number = 0; number < 4; number++) {
            unsigned bytes = narrow_bytes[control >> (2 * number) & 3];
            for (unsigned b = 0; b < 4; b++)
                shuffles[control][4 * number + b] = b < bytes ? from++ : 0x80;
        }
        shuffle_bytes[control] = from;
    }
}

/* Four numbers by one byte shuffle. Stops where fewer than 16 data bytes are left; returns how many
 * numbers are done and moves *data behind theirs. */
__attribute__((target("ssse3"))) static uint32_t decode_shuffled(const struct windrow_stream *stream, uint32_t *numbers,
                                                                 const uint8_t **data)
{
    const uint8_t *from = *data, *end = from + stream->data_bytes;
    uint32_t groups = stream->count / 4, group = 0;
    for (; group < groups && end - from >= 16; group++) {
        unsigned control = stream->control[group];
        __m128i bytes = _mm_loadu_si128((const __m128i *)from);
        __m128i shuffle = _mm_load_si128((const __m128i *)shuffles[control]);
        _mm_storeu_si128((__m128i *)(numbers + 4 * (size_t)group), _mm_shuffle_epi8(bytes, shuffle));
        from += shuffle_bytes[control];
    }
    *data = from;
    return 4 * group;
}

#endif

void windrow_stream_decode(const struct windrow_stream *stream, uint32_t *numbers)
{
#if defined(__x86_64__)
    if (__builtin_cpu_supports("ssse3")) {
        const uint8_t *data = stream->data;
        uint32_t done = decode_shuffled(stream, numbers, &data);
        struct windrow_stream rest = {
            .control = stream->control + done / 4,
            .data = data,
            .count = stream->count - done,
            .data_bytes = stream->data_bytes - (uint32_t)(data - stream->data),
        };
        windrow_stream_decode_plain(&rest, numbers + done);
        return;
    }
#endif
    windrow_stream_decode_plain(stream, numbers);
}

/* ---- Whole lists --------------------------------------------------------------------------- */

/* Decodes into 64-bit numbers; false unless the data is used up exactly. */
static bool decode_checked(const struct windrow_stream *stream, bool wide, uint64_t *numbers)
{
    const uint8_t *code_bytes = wide ? wide_bytes : narrow_bytes, *data = stream->data;
    uint64_t left_bytes = stream->data_bytes;
    for (uint32_t i = 0; i < stream->count; i++) {
        unsigned bytes = code_bytes[stream->control[i / 4] >> (2 * (i % 4)) & 3];
        uint64_t value = 0;
        if (bytes > left_bytes)
            return false;
        memcpy(&value, data, bytes);
        data += bytes;
        left_bytes -= bytes;
        numbers[i] = le64toh(value);
    }
    return left_bytes == 0;
}

/* Walks through one part of one list after another. */
struct walk {
    const uint64_t *numbers;
    uint64_t left;       /* numbers in the stream */
    uint64_t list_first; /* first source of the last non-empty list */
    uint64_t count;      /* entries of the list that are not yet begun */
    uint64_t source;     /* the next source */
    uint64_t run_left;   /* sources of the entry that are not yet taken, this one included; 0: list is done */
    bool runs;
};

/* Goes to the next entry. The first entry of a list is relative to the last list's, the others to what
 * stands before them. False when the stream is at its end. */
static bool walk_entry(struct walk *walk, bool first)
{
    uint64_t width = walk->runs ? 2 : 1;
    if (walk->count == 0) {
        walk->run_left = 0;
        return true;
    }
    if (walk->left < width)
        return false;
    walk->count--;
    /* Here `source` already stands one behind the last source of the entry before. */
    walk->source = first ? walk->list_first + unzigzag(walk->numbers[0]) : walk->source + walk->numbers[0];
    if (first)
        walk->list_first = walk->source;
    walk->run_left = walk->runs ? walk->numbers[1] + WINDROW_RUN_LEAST : 1;
    walk->numbers += width;
    walk->left -= width;
    return walk->run_left <= UINT64_MAX / 2 && walk->run_left > 0;
}

static bool walk_list(struct walk *walk, uint64_t count)
{
    walk->count = count;
    return walk_entry(walk, true);
}

static bool walk_step(struct walk *walk)
{
    walk->source++;
    return --walk->run_left > 0 || walk_entry(walk, false);
}

/* Appends one list to sources[*links…], smallest next; false when it is not ascending, in range and short enough. */
static bool merge_list(struct walk walks[3], uint64_t core_pages, uint64_t most_links, uint64_t *sources, uint64_t *links)
{
    for (uint64_t begin = *links;; (*links)++) {
        struct walk *least = NULL;
        for (int w = 0; w < 3; w++)
            if (walks[w].run_left && (!least || walks[w].source < least->source))
                least = &walks[w];
        if (!least)
            return true;
        if (*links == most_links || least->source >= core_pages || (*links > begin && least->source <= sources[*links - 1]))
            return false;
        sources[*links] = least->source;
        if (!walk_step(least))
            return false;
    }
}

static enum windrow_status merge_lists(const struct windrow_block *block, const struct windrow_block_record *record,
                                       uint64_t core_pages, uint64_t *numbers, uint64_t *sources, uint32_t *counts)
{
    const struct windrow_stream *streams[STREAMS] = {&block->far_counts, &block->near_counts, &block->run_counts,
                                                     &block->far_gaps, &block->near_gaps, &block->runs};
    const uint64_t *decoded[STREAMS];
    for (int s = 0; s < STREAMS; s++) {
        if (!decode_checked(streams[s], block->flags & WINDROW_BLOCK_WIDE, numbers))
            return damaged(record, "its numbers do not fill their bytes");
        decoded[s] = numbers;
        numbers += streams[s]->count;
    }
    struct walk walks[3] = {
        {.numbers = decoded[FAR_GAPS], .left = streams[FAR_GAPS]->count, .list_first = block->far_base},
        {.numbers = decoded[NEAR_GAPS], .left = streams[NEAR_GAPS]->count, .list_first = block->near_base},
        {.numbers = decoded[RUNS], .left = streams[RUNS]->count, .list_first = block->run_base, .runs = true},
    };
    uint64_t links = 0;
    for (uint32_t t = 0; t < block->target_count; t++) {
        uint64_t begin = links;
        for (int w = 0; w < 3; w++)
            if (!walk_list(&walks[w], streams[w]->count ? decoded[w][t] : 0))
                return damaged(record, "a list has more entries than the block");
        if (!merge_list(walks, core_pages, record->link_count, sources, &links))
            return damaged(record, "a list is not ascending or names a page that does not exist");
        counts[t] = (uint32_t)(links - begin);
    }
    if (links != record->link_count || walks[0].left || walks[1].left || walks[2].left)
        return damaged(record, "its lists do not use up its numbers");
    return WINDROW_OK;
}

enum windrow_status windrow_block_lists(const struct windrow_block *block, const struct windrow_block_record *record,
                                        uint64_t core_pages, struct windrow_lists *lists)
{
    lists->sources.bytes = lists->counts.bytes = lists->scratch.bytes = 0;
    uint64_t number_count = (uint64_t)block->far_counts.count + block->near_counts.count + block->run_counts.count +
                            block->far_gaps.count + block->near_gaps.count + block->runs.count;
    if (record->link_count > UINT32_MAX)
        return damaged(record, "it claims more links than a block can hold");
    enum windrow_status status = windrow_buffer_reserve(&lists->scratch, number_count * 8 + 8);
    if (!status)
        status = windrow_buffer_reserve(&lists->sources, record->link_count * 8 + 8);
    if (!status)
        status = windrow_buffer_reserve(&lists->counts, (uint64_t)record->target_count * 4 + 4);
    if (!status)
        status = merge_lists(block, record, core_pages, (uint64_t *)(void *)lists->scratch.data,
                             (uint64_t *)(void *)lists->sources.data, (uint32_t *)(void *)lists->counts.data);
    if (status)
        return status;
    lists->sources.bytes = record->link_count * 8;
    lists->counts.bytes = (size_t)record->target_count * 4;
    return WINDROW_OK;
}

void windrow_lists_free(struct windrow_lists *lists)
{
    windrow_buffer_free(&lists->sources);
    windrow_buffer_free(&lists->counts);
    windrow_buffer_free(&lists->scratch);
}
