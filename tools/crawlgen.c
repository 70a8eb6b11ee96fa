/* crawlgen: a synthetic crawl of any size on standard output, the same bytes for the same seed.
 *
 * The web and its laws are described in crawlgen_web.h. Here a round of the crawl becomes text, and
 * threads make rounds out of order, to be written in order: a few rounds of some MB each are all the
 * memory there is, at any size.
 */
#include <argp.h>
#include <errno.h>
#include <pthread.h>
#include <stdbool.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "crawlgen_web.h"
#include "windrow.h"

struct options {
    uint64_t links;
    uint64_t seed;
    uint64_t threads;
    bool pairs;
    bool slow_mixing;
    bool describe;
};

/* One round's text under construction; owned by one thread at a time. */
struct piece {
    char *text;
    char *end;   /* behind the last byte written */
    char *limit; /* end of the allocation */
    uint64_t links;
    uint64_t links_max; /* stop here */
    uint64_t round;
    bool pairs; /* the shape */
    bool ready;
    /* the page being written */
    char source[URL_BYTES_MAX];
    uint32_t source_bytes;
    char last[URL_BYTES_MAX]; /* its last link, for repeating */
    uint32_t last_bytes;
};

/* ---- links ---- */

static void piece_reserve(struct piece *piece, size_t bytes)
{
    if ((size_t)(piece->limit - piece->end) >= bytes)
        return;
    size_t used = (size_t)(piece->end - piece->text);
    size_t size = (size_t)(piece->limit - piece->text) * 2 + bytes + (1 << 20);
    char *text = realloc(piece->text, size);
    if (!text) {
        fprintf(stderr, "crawlgen: out of memory for a round of %zu bytes; try fewer --threads\n", size);
        exit(WINDROW_RESOURCE);
    }
    piece->text = text;
    piece->end = text + used;
    piece->limit = text + size;
}

/* A link in two halves: link_begin writes what stands in front of the target, then the caller writes
 * the target at piece->end, and link_end closes it. */
static inline void link_begin(struct piece *piece)
{
    piece_reserve(piece, 3 * URL_BYTES_MAX);
    if (piece->pairs)
        piece->end = put(piece->end, piece->source, piece->source_bytes);
    *piece->end++ = '\t';
}

static inline void link_end(struct piece *piece, char *start, char *end)
{
    piece->end = end;
    piece->links++;
    if (piece->pairs) {
        /* From the link's number and the page, not from the list's own numbers: both shapes hold the same links. */
        uint64_t random = hash_two(piece->round ^ UINT64_C(0xf0110), piece->links);
        if ((random & 0xffff) < 3300)
            piece->end = random & 0x70000 ? PUT_LITERAL(end, "\tnofollow") : PUT_LITERAL(end, "\tnofollow ugc");
        *piece->end++ = '\n';
    }
    piece->last_bytes = (uint32_t)(end - start);
    memcpy(piece->last, start, piece->last_bytes);
}

static void link_text(struct piece *piece, const char *text, size_t bytes)
{
    if (piece->links == piece->links_max)
        return;
    link_begin(piece);
    char *start = piece->end;
    link_end(piece, start, put(start, text, bytes));
}

static void link_position(const struct model *model, struct piece *piece, struct host *host, uint64_t position,
                          uint64_t random)
{
    if (piece->links == piece->links_max)
        return;
    link_begin(piece);
    char *start = piece->end;
    link_end(piece, start,
             (random & 0xff) < 4 ? put_odd_url(model, host, start, position, random >> 8)
                                 : put_url(model, host, start, position));
}

/* A link to another host than `from`. */
static void link_outside(const struct model *model, struct piece *piece, const struct host *from, uint64_t *state)
{
    uint64_t random = draw(state), choice = random >> 56;
    uint64_t round = piece->round, visit;
    struct host host;
    if (choice < 40) {
        host_make(model, &host, from->slot, from->generation ^ (1 + (random & 1)));
    } else if (choice < 58) {
        host_make(model, &host, model->slots, below_skewed(random, 160 * (round + 1), 2));
    } else {
        uint32_t slot = model->popularity[random >> 32 & (POPULARITY_ENTRIES - 1)];
        if (choice < 80)
            slot = (uint32_t)below(random >> 20, model->slots);
        else if (choice < 90)
            round += 1 + (random & 15);
        else
            round = below_skewed(random, round + 1, 3);
        host_make(model, &host, slot, slot_generation(model, slot, round, &visit));
    }
    random = draw(state);
    uint64_t extent = host_visits_until(model, &host, piece->round) * host.block;
    uint64_t position = 0;
    choice = random >> 56;
    if (choice >= 100 && extent) {
        /* at the pages of its first visits, so that popular pages get more popular */
        position = below_skewed(random, extent, choice < 170 ? 3 : 2);
    } else if (choice >= 140) {
        position = below_skewed(random, host.block, 2);
    }
    if (host.closed && position >= extent)
        position = 0;
    if ((random >> 32 & 0x7f) == 0 && host.prefix[4] == 's') {
        /* an old link, by http to a host that answers by https */
        memmove(host.prefix + 4, host.prefix + 5, --host.prefix_bytes - 4);
    }
    link_position(model, piece, &host, position, random >> 40);
}

/* A page's own list seldom names the navigation pages, to which it links anyway. */
static inline uint64_t beyond_navigation(const struct host *host, uint64_t position, uint64_t known)
{
    return position < host->navigation && position + host->navigation < known ? position + host->navigation : position;
}

/* The side bar: every page of a section links to the first pages of that section, fetched or not. */
static void sidebar_write(const struct model *model, struct piece *piece, struct host *host, uint64_t position, uint64_t extent)
{
    uint64_t first = position >> host->section_bits << host->section_bits;
    uint64_t known = host->closed ? extent : extent + host->block / 2 + 2;
    for (uint64_t item = 0; item < host->sidebar; item++) {
        uint64_t target = first + item;
        if (target >= host->navigation && target < known && target != position)
            link_position(model, piece, host, target, 255);
    }
}

/* Writes `count` links of the list that belongs to `owner`, a position of the host. */
static void list_write(const struct model *model, struct piece *piece, struct host *host, uint64_t owner,
                       uint64_t count, uint64_t extent)
{
    uint64_t state = hash_two(host->key ^ UINT64_C(0x115), owner);
    for (uint64_t i = 0; i < count && piece->links < piece->links_max; i++) {
        uint64_t random = draw(&state);
        uint32_t choice = random & 1023;
        random >>= 10;
        if (choice < 360 && !host->inward) {
            link_outside(model, piece, host, &state);
        } else if (choice < 880) {
            /* near neighbours: at a distance of 1 + up to 2^b, b geometric; long lists reach further */
            uint64_t reach = UINT64_C(2) << __builtin_ctzll((random >> 32) | 64);
            while (reach < count / 2)
                reach <<= 1;
            uint64_t distance = 1 + (random & (reach - 1));
            /* A little beyond what was visited so far there are pages, too; in closed hosts there are none. */
            uint64_t known = host->closed ? extent : extent + host->block / 2 + 2;
            uint64_t position = owner + distance;
            if ((!(random >> 12 & 1) || position >= known) && owner >= distance)
                position = owner - distance;
            if (position >= known)
                position = 0;
            link_position(model, piece, host, beyond_navigation(host, position, known), random >> 16);
        } else if (choice < 920) {
            link_position(model, piece, host, owner >> host->section_bits << host->section_bits, random);
        } else if (choice < 1000) {
            link_position(model, piece, host, beyond_navigation(host, below_skewed(random, extent, 2), extent), random >> 32);
        } else if (choice < 1021) {
            if (piece->last_bytes) {
                char again[URL_BYTES_MAX];
                memcpy(again, piece->last, piece->last_bytes);
                link_text(piece, again, piece->last_bytes);
            } else {
                link_position(model, piece, host, 0, random);
            }
        } else {
            const char *bad = bad_targets[below(random, BAD_TARGETS)];
            link_text(piece, bad, strlen(bad));
        }
    }
}

/* The navigation links of a host, written once a visit and copied for each page. */
struct navigation {
    uint32_t end[NAVIGATION_MAX]; /* in text, behind each link */
    char text[NAVIGATION_MAX * URL_BYTES_MAX];
};

static void navigation_make(const struct model *model, struct navigation *navigation, struct host *host)
{
    char *to = navigation->text;
    for (uint64_t i = 0; i < host->navigation; i++) {
        *to++ = '\t';
        to = put_url(model, host, to, i);
        navigation->end[i] = (uint32_t)(to - navigation->text);
    }
}

static void navigation_write(struct piece *piece, const struct navigation *navigation,
                             uint64_t count)
{
    if (piece->pairs) {
        for (uint64_t i = 0; i < count; i++) {
            uint32_t start = i ? navigation->end[i - 1] : 0;
            link_text(piece, navigation->text + start + 1, navigation->end[i] - start - 1);
        }
        return;
    }
    if (count > piece->links_max - piece->links)
        count = piece->links_max - piece->links;
    if (!count)
        return;
    piece_reserve(piece, navigation->end[count - 1]);
    piece->end = put(piece->end, navigation->text, navigation->end[count - 1]);
    piece->links += count;
    uint32_t last = count > 1 ? navigation->end[count - 2] : 0;
    piece->last_bytes = navigation->end[count - 1] - last - 1;
    memcpy(piece->last, navigation->text + last + 1, piece->last_bytes);
}

static void page_write(const struct model *model, struct piece *piece, struct host *host,
                       const struct navigation *navigation, uint64_t position, uint64_t extent)
{
    if (piece->links == piece->links_max)
        return;
    uint64_t state = hash_two(host->key ^ UINT64_C(0x9a6e), position);
    uint64_t random = draw(&state);
    piece_reserve(piece, 2 * URL_BYTES_MAX);
    piece->source_bytes = (uint32_t)(put_url(model, host, piece->source, position) - piece->source);
    piece->last_bytes = 0;
    bool linkless = (random & 0xff) < 8 && position >= host->navigation && !host->closed;
    if (!piece->pairs || linkless)
        piece->end = put(piece->end, piece->source, piece->source_bytes);
    if (linkless) {
        *piece->end++ = '\n';
        return;
    }
    random >>= 8;
    if (host->chain) {
        uint64_t pages = host->visits * host->block;
        if (position + 1 < pages) {
            link_position(model, piece, host, position + 1, random);
        } else {
            struct host next;
            host_make(model, &next, host->slot, host->generation + 1);
            link_position(model, piece, &next, 0, random);
        }
        if (position && (random >> 20 & 15) == 0)
            link_position(model, piece, host, position - 1, random >> 24);
    } else {
        navigation_write(piece, navigation, host->navigation);
        sidebar_write(model, piece, host, position, extent);
        uint64_t count = (3 + (random & 3)) << doublings(random >> 8, 20000, 9);
        if (count > LINKS_PER_PAGE_MAX)
            count = LINKS_PER_PAGE_MAX;
        uint64_t copied = 0, distance = 1 + (random >> 24 & 3);
        if ((random >> 28 & 7) < 5 && position >= distance) {
            copied = count * 3 / 4;
            list_write(model, piece, host, position - distance, copied, extent);
        }
        list_write(model, piece, host, position, count - copied, extent);
        if ((random >> 32 & 63) == 0)
            link_text(piece, piece->source, piece->source_bytes);
    }
    if (!piece->pairs)
        *piece->end++ = '\n';
}

static void visit_write(const struct model *model, struct piece *piece, uint32_t slot)
{
    struct host host;
    struct navigation navigation;
    uint64_t visit;
    uint64_t generation = slot_generation(model, slot, piece->round, &visit);
    host_make(model, &host, slot, generation);
    navigation_make(model, &navigation, &host);
    uint64_t first = visit * host.block, extent = first + host.block;
    /* A crawler does not walk in path order: step through the block by a prime that does not divide it. */
    static const uint64_t strides[] = {7, 11, 13, 17, 19, 23, 29, 31};
    uint64_t stride = strides[visit & 7];
    if (host.block % stride == 0)
        stride = 1;
    uint64_t offset = hash_two(host.key, visit) % host.block;
    for (uint64_t i = 0; i < host.block && piece->links < piece->links_max; i++) {
        uint64_t position = first + offset;
        offset = (offset + stride) % host.block;
        if (host_fetches(&host, position))
            page_write(model, piece, &host, &navigation, position, extent);
        /* One page in a hundred was fetched in the visit before, too. */
        if (visit && hash_two(host.key ^ UINT64_C(0xa6a1), position) % 100 == 0 &&
            host_fetches(&host, position - host.block))
            page_write(model, piece, &host, &navigation, position - host.block, extent);
    }
}

static void round_write(const struct model *model, struct piece *piece, uint64_t round, uint64_t links_max)
{
    piece->end = piece->text;
    piece->links = 0;
    piece->links_max = links_max;
    piece->round = round;
    uint64_t slot = hash_two(model->seed, ~round) % model->slots;
    for (uint32_t i = 0; i < model->slots && piece->links < links_max; i++) {
        visit_write(model, piece, (uint32_t)slot);
        slot = (slot + model->visit_stride) % model->slots;
    }
}

/* ---- threads: rounds are made out of order and written in order ---- */

struct works {
    const struct model *model;
    struct piece *pieces; /* round r is made in piece r % count */
    uint64_t count;
    uint64_t links_max;
    pthread_mutex_t lock;
    pthread_cond_t changed;
    uint64_t next;    /* round to be made next */
    uint64_t written; /* rounds written */
    bool stop;
};

static void *works_run(void *argument)
{
    struct works *works = argument;
    pthread_mutex_lock(&works->lock);
    for (;;) {
        while (!works->stop && works->next >= works->written + works->count)
            pthread_cond_wait(&works->changed, &works->lock);
        if (works->stop)
            break;
        uint64_t round = works->next++;
        pthread_mutex_unlock(&works->lock);
        struct piece *piece = &works->pieces[round % works->count];
        round_write(works->model, piece, round, works->links_max);
        pthread_mutex_lock(&works->lock);
        piece->ready = true;
        pthread_cond_broadcast(&works->changed);
    }
    pthread_mutex_unlock(&works->lock);
    return NULL;
}

static enum windrow_status write_all(const char *text, size_t bytes)
{
    while (bytes) {
        ssize_t wrote = write(STDOUT_FILENO, text, bytes);
        if (wrote < 0 && errno == EINTR)
            continue;
        if (wrote < 0) {
            fprintf(stderr, "crawlgen: standard output: %s\n", strerror(errno));
            return WINDROW_RESOURCE;
        }
        text += wrote;
        bytes -= (size_t)wrote;
    }
    return WINDROW_OK;
}

static enum windrow_status crawl_write(const struct model *model, const struct options *options)
{
    struct works works = {.model = model, .count = 2 * options->threads, .links_max = options->links,
                          .lock = PTHREAD_MUTEX_INITIALIZER, .changed = PTHREAD_COND_INITIALIZER};
    works.pieces = allocate(works.count * sizeof *works.pieces);
    for (uint64_t i = 0; i < works.count; i++)
        works.pieces[i].pairs = options->pairs;
    pthread_t threads[THREADS_MAX];
    uint64_t started = 0;
    enum windrow_status status = WINDROW_OK;
    for (; started < options->threads; started++) {
        int error = pthread_create(&threads[started], NULL, works_run, &works);
        if (error) {
            fprintf(stderr, "crawlgen: cannot start a thread: %s\n", strerror(error));
            status = WINDROW_RESOURCE;
            goto out;
        }
    }
    uint64_t links_left = options->links;
    for (uint64_t round = 0; links_left && !status; round++) {
        struct piece *piece = &works.pieces[round % works.count];
        pthread_mutex_lock(&works.lock);
        while (!piece->ready)
            pthread_cond_wait(&works.changed, &works.lock);
        pthread_mutex_unlock(&works.lock);
        if (piece->links > links_left) /* the last one: make it again, cut where the crawl ends */
            round_write(model, piece, round, links_left);
        links_left -= piece->links;
        status = write_all(piece->text, (size_t)(piece->end - piece->text));
        pthread_mutex_lock(&works.lock);
        piece->ready = false;
        works.written++;
        pthread_cond_broadcast(&works.changed);
        pthread_mutex_unlock(&works.lock);
    }
out:
    pthread_mutex_lock(&works.lock);
    works.stop = true;
    pthread_cond_broadcast(&works.changed);
    pthread_mutex_unlock(&works.lock);
    while (started)
        pthread_join(threads[--started], NULL);
    for (uint64_t i = 0; i < works.count; i++)
        free(works.pieces[i].text);
    free(works.pieces);
    return status;
}

/* ---- command line ---- */

static const char description[] =
    "The crawl is made of rounds of some 50,000 links, each a function of the seed and its number.\n"
    "\n"
    "hosts       A round visits 403 slots. A slot of class k (0 to 14; fewer slots in higher classes)\n"
    "            keeps a host for 2^k rounds. A visit covers a block of 2 positions and more, in the mean\n"
    "            growing with the class, with a Pareto tail.\n"
    "pages       Four positions in ten are fetched, hosts' navigation pages and directory indexes always;\n"
    "            the others are the frontier, seen as targets only. 3 % of the fetched have no links. One\n"
    "            small host in sixteen keeps to itself: no link to other hosts, seven in ten fetched.\n"
    "links       A page links to the 1 to 16 navigation pages of its host and has a list of its own:\n"
    "            5 to 12 links, doubled d times with probability 0.3^d. Three lists in eight copy three\n"
    "            quarters of their length from a page just before. A list's links go: 33 % to another\n"
    "            host, 50 % to near neighbours in path order (distance 1 + up to 2^b, b geometric), 5 % to\n"
    "            the directory's index, 10 % to any position of the host with density x^(-1/2), 2 % repeat\n"
    "            the link before, 0.2 % are malformed or of another scheme.\n"
    "hosts'      Slot by weight (class + 2)/(rank in class + 2); round of the host as now*u^3, u uniform:\n"
    "in-links    early hosts collect links as t^(-2/3). 16 % go to siblings in the domain, 7 % to hosts\n"
    "            that are never fetched, 9 % to hosts of the same round, 4 % to hosts yet to come. On the\n"
    "            host: 40 % the home page, else density x^(-2/3) or x^(-1/2) over its positions.\n"
    "dirt        2 % of the links are in a spelling that the normal form folds, 1.6 % of the pages link to\n"
    "            themselves beside their navigation, 1 % are fetched twice; pairs: 5 % nofollow.\n"
    "slow mixing Three hosts in eight are closed: all pages fetched, no link out. Half of these are a\n"
    "            chain: a page links to the next one, now and then to the one before, and the last page to\n"
    "            the slot's next host.\n"
    "\n"
    "Measured at 2 million links, seed 1, after the link rules: 204,000 pages on 9,100 hosts (5,200 of them\n"
    "fetched), 57 % of the pages in the frontier, 42 % with kept links, 18 kept links for each of these,\n"
    "7.6 for each page; 74 % of them inside the host; 20 % of all link fields are repetitions, 2.9 % self\n"
    "links, 0.14 % malformed or of another scheme. Mean URL of a page: 62 bytes.\n";

enum { KEY_DESCRIBE = 256 };

static const struct argp_option option_table[] = {
    {"links", 'n', "N", 0, "Write exactly N links (suffix K, M or G: decimal); default 1M", 0},
    {"seed", 's', "S", 0, "Number that the whole crawl follows from; default 1", 0},
    {"shape", 'f', "lists|pairs", 0, "A line for each page, or a line for each link with its rel; default lists", 0},
    {"slow-mixing", 'm', NULL, 0, "Add closed hosts and long chains of pages", 0},
    {"threads", 't', "T", 0, "Threads that make rounds; the bytes do not depend on it; default 2", 0},
    {"describe", KEY_DESCRIBE, NULL, 0, "Say what laws the crawl follows, and make none", 0},
    {0},
};

static uint64_t parse_number(struct argp_state *state, const char *name, const char *text, uint64_t most)
{
    char *end;
    errno = 0;
    uint64_t number = strtoull(text, &end, 10), unit = 1;
    if (*end == 'K')
        unit = 1000, end++;
    else if (*end == 'M')
        unit = 1000000, end++;
    else if (*end == 'G')
        unit = 1000000000, end++;
    if (errno || end == text || *end || text[0] < '0' || text[0] > '9' || number > most / unit)
        argp_error(state, "--%s: '%s' is not a number up to %ju", name, text, (uintmax_t)most);
    return number * unit;
}

static error_t parse_option(int key, char *argument, struct argp_state *state)
{
    struct options *options = state->input;
    switch (key) {
    case 'n':
        options->links = parse_number(state, "links", argument, UINT64_C(1000000000000));
        return 0;
    case 's':
        options->seed = parse_number(state, "seed", argument, UINT64_MAX);
        return 0;
    case 't':
        options->threads = parse_number(state, "threads", argument, THREADS_MAX);
        if (!options->threads)
            argp_error(state, "--threads: at least 1");
        return 0;
    case 'f':
        options->pairs = strcmp(argument, "pairs") == 0;
        if (!options->pairs && strcmp(argument, "lists") != 0)
            argp_error(state, "--shape: '%s' is neither lists nor pairs", argument);
        return 0;
    case 'm':
        options->slow_mixing = true;
        return 0;
    case KEY_DESCRIBE:
        options->describe = true;
        return 0;
    case ARGP_KEY_ARG:
        argp_error(state, "'%s': no arguments, only options", argument);
        return 0;
    default:
        return ARGP_ERR_UNKNOWN;
    }
}

int main(int argc, char **argv)
{
    struct options options = {.links = 1000000, .seed = 1, .threads = 2};
    static const struct argp parser = {
        .options = option_table,
        .parser = parse_option,
        .doc = "Writes a synthetic crawl to standard output, as a dump that windrow shard reads.",
    };
    argp_program_version = "crawlgen (windrow) " WINDROW_VERSION;
    argp_err_exit_status = WINDROW_USAGE;
    argp_parse(&parser, argc, argv, 0, NULL, &options);
    if (options.describe)
        return fputs(description, stdout) < 0 || fflush(stdout) ? WINDROW_RESOURCE : WINDROW_OK;
    struct model *model = model_make(options.seed, options.slow_mixing);
    enum windrow_status status = crawl_write(model, &options);
    model_free(model);
    return status;
}
