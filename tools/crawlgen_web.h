/* crawlgen_web: the web that crawlgen crawls: its hosts, their pages and URLs, and the laws behind them.
 *
 * Of crawlgen.c alone, which includes it: the functions are static, so that the hot loop is one unit for
 * the compiler. A model is read-only once made and may be used by any number of threads; a host is a
 * value of one thread, and holds no memory of its own.
 *
 * Nothing is remembered about pages: whatever there is to know about a host or a page (its name, its
 * path, whether it is fetched, its links) is a function of the seed and of its number, by hashing.
 * So a billion links take as much memory as a thousand, any round can be made by any thread, and a
 * shorter crawl is the beginning of a longer one of the same seed and shape. All laws are in integer
 * arithmetic, so that every machine gives the same bytes.
 *
 * The model, of what is widely known of the web's structure (the figures are ours, from memory, chosen
 * so that the result has the shares that `--describe` states; no measured crawl stands behind them):
 *
 * Rounds.  The crawl is a sequence of rounds of some 50,000 links. A round visits SLOTS hosts. A slot
 *   of class k keeps its host for 2^k rounds (one visit a round) and then goes on to its next host, its
 *   next generation. There are fewer slots in the higher classes, and their visits are longer: host
 *   sizes have a tail like a Pareto law, hosts come back at many places of the dump, and pages, hosts
 *   and links all grow linearly.
 * Pages.  A host's pages have positions 0, 1, 2, …; a visit covers one block of them. Positions are cut
 *   into sections (directories). The first few positions are the host's navigation pages, 0 is its
 *   home page; position 0 of a section is its index. A hash decides whether a position is fetched
 *   or stays in the frontier.
 * Links.  A fetched page links to all navigation pages of its host, to the first pages of its section
 *   (the side bar of a template), and has a list of its own whose length has a heavy tail. A list may be copied in part from an earlier page (the copying model of
 *   Kumar, Raghavan, Rajagopalan, Sivakumar, Tomkins & Upfal 2000). Its links go to near neighbours in
 *   path order, the section's index, older positions of the host, or other hosts.
 * Links between hosts.  Slot by a fixed table with a Zipf law (Zipf 1949); round of the host as
 *   now·u^3 for uniform u, so that early hosts collect links as t^(-2/3): the law of age that
 *   preferential attachment gives (Barabási & Albert 1999). Some go to siblings in the same domain,
 *   to hosts of this round, to hosts that are yet to come, or to hosts that are never visited. On the
 *   host: mostly the home page, else a page with a bias to early positions: a long tail of deep links.
 *   One host in sixteen keeps to itself, as small shops do: no link to other hosts, seven tenths fetched.
 *   So power iteration on the crawl converges at nearly the rate of the damping, as it does on real ones.
 * Dirt.  Pages without links, pages fetched twice, self links, repeated links, spellings that the
 *   normal form has to fold, other schemes, malformed URLs, nofollow (in the shape that can say it).
 * Slow mixing.  Three eighths of the hosts are closed: no link leaves them and all their pages are
 *   fetched. Half of these are one long chain of pages, which goes on into the slot's next host.
 *
 * Random numbers: SplitMix64 (Steele, Lea & Flood 2014, "Fast splittable pseudorandom number
 * generators"; constants of Sebastiano Vigna's public-domain version).
 */
#ifndef CRAWLGEN_WEB_H
#define CRAWLGEN_WEB_H

#include <stdbool.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "windrow.h"

enum {
    CLASSES = 15,
    POPULARITY_ENTRIES = 1 << 15,
    NAVIGATION_MAX = 16,
    WORD_BYTES = 16,       /* a word's record: copied whole, then cut to its length */
    URL_BYTES_MAX = 320,   /* more than the longest URL that write_url can build, odd spellings included */
    LINKS_PER_PAGE_MAX = 4000,
    THREADS_MAX = 64
};

/* Slots of each class; a host of class k is visited in 2^k rounds. */
static const uint32_t class_slots[CLASSES] = {150, 92, 58, 36, 24, 14, 9, 6, 4, 3, 2, 2, 1, 1, 1};
/* Positions in a visit of a host of the class, before the hosts' own spread. */
static const uint32_t class_block[CLASSES] = {3, 4, 6, 8, 10, 13, 16, 20, 26, 34, 44, 60, 80, 110, 140};

static const char *const words[] = {
    "amber", "anchor", "apple", "april", "arch", "atlas", "autumn", "bakery", "barley", "basil", "bay", "beacon",
    "bell", "berry", "birch", "blue", "boat", "border", "bread", "breeze", "brick", "bridge", "bronze", "brook",
    "cabin", "cable", "camp", "canal", "candle", "canvas", "cape", "cargo", "castle", "cedar", "cellar", "chalk",
    "chapel", "chart", "cherry", "choir", "cider", "cinema", "citizen", "clay", "cliff", "clock", "cloud", "clover",
    "coast", "cobalt", "comet", "compass", "copper", "coral", "corner", "cotton", "council", "country", "court",
    "crane", "creek", "cricket", "crystal", "current", "cypress", "dairy", "dawn", "delta", "depot", "desert", "dew",
    "dock", "dolphin", "drift", "drum", "dune", "eagle", "early", "east", "echo", "elder", "ember", "engine",
    "estuary", "evening", "fair", "falcon", "farm", "feather", "fern", "ferry", "festival", "field", "film", "fjord",
    "flag", "flint", "flora", "flour", "forest", "forge", "fountain", "fox", "frost", "fruit", "gallery", "garden",
    "gate", "ginger", "glacier", "glass", "gold", "grain", "granite", "grape", "gravel", "green", "grove", "guide",
    "gull", "hall", "hamlet", "harbour", "harvest", "haven", "hazel", "heath", "hedge", "herald", "heron", "hill",
    "history", "holiday", "holly", "honey", "horizon", "house", "hymn", "indigo", "inlet", "iris", "iron", "island",
    "ivory", "ivy", "jade", "jetty", "journal", "juniper", "kayak", "kettle", "kiln", "kite", "lagoon", "lake",
    "lantern", "larch", "laurel", "lavender", "ledger", "lemon", "letter", "library", "lily", "linen", "lodge",
    "lotus", "lumber", "maple", "marble", "market", "marsh", "meadow", "mellow", "merchant", "mill", "mineral",
    "mint", "mirror", "mist", "monday", "moon", "morning", "mosaic", "moss", "mountain", "museum", "music", "narrow",
    "nectar", "needle", "nest", "north", "notes", "nutmeg", "oak", "oasis", "ocean", "olive", "opal", "orbit",
    "orchard", "otter", "oyster", "paddle", "palm", "paper", "parade", "parish", "park", "pasture", "path", "pearl",
    "pebble", "people", "pepper", "pier", "pilot", "pine", "planet", "plaza", "plum", "pocket", "pond", "poplar",
    "port", "prairie", "quarry", "quartz", "quay", "quiet", "quill", "rain", "raven", "record", "reed", "reef",
    "ridge", "river", "robin", "rocket", "rose", "saddle", "saffron", "sail", "salt", "sand", "school", "season",
    "shell", "silver", "south", "spring", "station", "stone", "summer", "tide", "timber", "tower", "valley",
    "village", "walnut", "water", "west", "willow", "winter", "yarrow",
};
enum { WORDS = sizeof words / sizeof words[0] };

static const char *const navigation_paths[NAVIGATION_MAX] = {
    "/", "/about", "/contact.html", "/news/", "/archive/", "/search", "/help/index.html", "/sitemap.html",
    "/legal/privacy", "/legal/terms", "/products/", "/events/calendar", "/press", "/jobs/", "/login?next=/", "/feed.xml",
};

/* Names in front of a domain's hosts: a domain has four, from one of these rows. */
static const char *const subdomains[4][4] = {
    {"www.", "blog.", "shop.", "forum."},
    {"", "www.", "news.", "images."},
    {"www.", "docs.", "static.old.", "old."},
    {"en.", "fr.m.", "m.", ""},
};

static const char *const bad_targets[] = {
    "mailto:office@harbour.example", "javascript:void(0)", "http:/one-slash/page", "https:///no-host",
    "tel:+000-555-0100", "http://two words.example/", "ftp://files.example/pub/readme.txt",
    "https://port.example:99999/", "data:text/plain,hello", "http://under[bracket.example/",
};
enum { BAD_TARGETS = sizeof bad_targets / sizeof bad_targets[0] };

/* What holds for the whole crawl; read-only once made. */
struct model {
    uint64_t seed;
    bool slow_mixing;
    uint32_t slots;
    uint32_t visit_stride; /* visits of a round come in steps of this, coprime to slots */
    uint8_t *slot_class;
    uint64_t *slot_phase; /* so that hosts of one class do not all change in the same round */
    uint16_t popularity[POPULARITY_ENTRIES]; /* slot of a random entry: the law of links between hosts */
    struct {
        char text[WORD_BYTES];
        uint8_t bytes;
    } word[WORDS];
};

struct host {
    uint64_t key;        /* hash of the host: all else follows from it */
    uint64_t generation; /* which host of its slot */
    uint32_t slot;
    uint64_t visits;     /* visits in its whole life */
    uint64_t block;      /* positions in a visit */
    uint64_t navigation; /* navigation pages */
    uint64_t sidebar;    /* pages of a section in its side bar */
    uint32_t section_bits;
    uint32_t style;
    bool inward; /* no link leaves it, and most of it is fetched */
    bool closed; /* so, and all of it is fetched */
    bool chain;  /* so, and each page links to the next one only */
    uint32_t prefix_bytes;
    char prefix[128]; /* scheme, host */
    uint64_t section; /* whose path is kept in section_text */
    uint32_t section_bytes;
    char section_text[96];
};

/* ---- random numbers ---- */

#define GOLDEN UINT64_C(0x9e3779b97f4a7c15)

static inline uint64_t mix(uint64_t z)
{
    z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
    return z ^ (z >> 31);
}

static inline uint64_t hash_two(uint64_t a, uint64_t b)
{
    return mix(a + (b + 1) * GOLDEN);
}

static inline uint64_t draw(uint64_t *state)
{
    return mix(*state += GOLDEN);
}

/* A number below `bound` from 32 random bits. */
static inline uint64_t below(uint64_t random, uint64_t bound)
{
    return (uint64_t)(((unsigned __int128)(random & UINT32_MAX) * bound) >> 32);
}

/* A number below `bound` with density falling as x^(-1/2) (power 2) or x^(-2/3) (power 3). */
static inline uint64_t below_skewed(uint64_t random, uint64_t bound, int power)
{
    uint64_t u = random & UINT32_MAX, skewed = u;
    for (int i = 1; i < power; i++)
        skewed = (skewed * u) >> 32;
    return below(skewed, bound);
}

/* How many times in a row 16 random bits stay below `threshold`: doublings that make a Pareto tail of
 * exponent -log2(threshold/65536). */
static inline uint32_t doublings(uint64_t random, uint32_t threshold, uint32_t most)
{
    uint32_t count = 0;
    while (count < most && (random & 0xffff) < threshold) {
        random = mix(random + GOLDEN);
        count++;
    }
    return count;
}

/* ---- text ---- */

static inline char *put(char *to, const char *text, size_t bytes)
{
    memcpy(to, text, bytes);
    return to + bytes;
}

#define PUT_LITERAL(to, literal) put(to, literal, sizeof literal - 1)

static inline char *put_string(char *to, const char *text)
{
    return put(to, text, strlen(text));
}

static inline char *put_word(const struct model *model, char *to, uint64_t random)
{
    uint64_t which = below(random, WORDS);
    memcpy(to, model->word[which].text, WORD_BYTES);
    return to + model->word[which].bytes;
}

static inline char *put_number(char *to, uint64_t number)
{
    char digits[20];
    int first = 20;
    do {
        digits[--first] = (char)('0' + number % 10);
        number /= 10;
    } while (number);
    return put(to, digits + first, (size_t)(20 - first));
}

static inline char *put_two_digits(char *to, uint64_t number)
{
    to[0] = (char)('0' + number / 10 % 10);
    to[1] = (char)('0' + number % 10);
    return to + 2;
}

/* ---- hosts ---- */

/* Host of a slot in a round, by generation; *visit gets the number of its visit in that round. */
static uint64_t slot_generation(const struct model *model, uint32_t slot, uint64_t round, uint64_t *visit)
{
    uint32_t class = model->slot_class[slot];
    uint64_t shifted = round + model->slot_phase[slot];
    uint64_t generation = shifted >> class;
    /* The first host of a slot begins in round 0, wherever its slot's phase stands. */
    *visit = generation ? shifted & ((UINT64_C(1) << class) - 1) : round;
    return generation;
}

/* Visits that a host has had before the end of `round`; 0 for one that is yet to come. */
static uint64_t host_visits_until(const struct model *model, const struct host *host, uint64_t round)
{
    if (host->slot == model->slots)
        return 0;
    uint64_t visit;
    uint64_t generation = slot_generation(model, host->slot, round, &visit);
    if (generation < host->generation)
        return 0;
    return generation == host->generation ? visit + 1 : host->visits;
}

static void host_name(const struct model *model, struct host *host)
{
    /* Four generations of a slot share a domain. */
    uint64_t domain = (host->generation >> 2) * (model->slots + 1) + host->slot;
    uint64_t random = hash_two(model->seed ^ UINT64_C(0xd0), domain);
    char *to = host->prefix;
    to = hash_two(host->key, 1) % 10 < 7 ? PUT_LITERAL(to, "https://") : PUT_LITERAL(to, "http://");
    if (random % 8 < 3) {
        /* a host of a large hosting domain */
        if (host->key & 64)
            to = PUT_LITERAL(to, "www.");
        to = PUT_LITERAL(to, "h");
        to = put_number(to, domain * 4 + (host->generation & 3));
        to = PUT_LITERAL(to, ".zone");
        to = put_number(to, below_skewed(random >> 8, 1000, 3));
        to = PUT_LITERAL(to, ".example");
    } else {
        to = put_string(to, subdomains[random >> 3 & 3][host->generation & 3]);
        to = put_word(model, to, random >> 8);
        if (random & 32)
            to = PUT_LITERAL(to, "-");
        to = put_word(model, to, random >> 24);
        to = put_number(to, domain);
        to = (random >> 6 & 3) == 3 ? PUT_LITERAL(to, ".test") : PUT_LITERAL(to, ".example");
    }
    host->prefix_bytes = (uint32_t)(to - host->prefix);
}

/* Makes the host of a slot (slot == model->slots: those that are never visited). */
static void host_make(const struct model *model, struct host *host, uint32_t slot, uint64_t generation)
{
    uint32_t class = slot < model->slots ? model->slot_class[slot] : 0;
    host->slot = slot;
    host->generation = generation;
    host->key = hash_two(hash_two(model->seed, slot), generation);
    host->visits = UINT64_C(1) << class;
    if (!generation && slot < model->slots)
        host->visits -= model->slot_phase[slot];
    uint64_t random = hash_two(host->key, 0);
    uint32_t spread = doublings(random, 26000, class < 5 ? 8 : 2);
    uint64_t base = class_block[class];
    host->block = ((base + below(random >> 16, base + 1)) << spread) - base / 2;
    host->navigation = 4 + below(random >> 20, NAVIGATION_MAX - 3);
    host->sidebar = 2 + (random >> 60 & 7);
    if (host->navigation > 1 + host->block / 2)
        host->navigation = 1 + host->block / 2;
    host->section_bits = 4 + (random >> 52 & 3);
    host->style = random >> 54 & 7;
    host->closed = model->slow_mixing && slot < model->slots && (random >> 57 & 7) < 3;
    host->chain = host->closed && random >> 63;
    host->inward = host->closed || (class < 5 && (random >> 57 & 15) == 15);
    host->section = UINT64_MAX;
    host_name(model, host);
}

static bool host_fetches(const struct host *host, uint64_t position)
{
    return host->closed || position < host->navigation || !(position & ((UINT64_C(1) << host->section_bits) - 1)) ||
           (hash_two(host->key ^ UINT64_C(0xfe7c4), position) & 0xffff) < (host->inward ? 46000 : 26500);
}

/* ---- URLs ---- */

static void host_section(const struct model *model, struct host *host, uint64_t section)
{
    char *to = host->section_text;
    uint64_t random = hash_two(host->key ^ UINT64_C(0x5ec), section);
    uint64_t part = section >> 4;
    *to++ = '/';
    to = put_word(model, to, hash_two(host->key ^ UINT64_C(0x9a47), part));
    if (part)
        to = put_number(to, part);
    *to++ = '/';
    if (host->style < 2) {
        /* a calendar: sixteen months to a part, each month once */
        to = put_number(to, 1998 + (section & 15) / 12 + part % 24);
        *to++ = '/';
        to = put_two_digits(to, 1 + (section & 15) % 12);
    } else {
        to = put_word(model, to, random);
        *to++ = '-';
        to = put_number(to, section & 15);
    }
    *to++ = '/';
    host->section = section;
    host->section_bytes = (uint32_t)(to - host->section_text);
}

/* Writes the path of a position; at most 200 bytes, with up to WORD_BYTES of slack touched behind. */
static char *put_path(const struct model *model, struct host *host, char *to, uint64_t position)
{
    if (position < host->navigation)
        return put_string(to, navigation_paths[position]);
    uint64_t section = position >> host->section_bits;
    uint64_t item = position & ((UINT64_C(1) << host->section_bits) - 1);
    if (section != host->section)
        host_section(model, host, section);
    to = put(to, host->section_text, host->section_bytes);
    if (!item)
        return to;
    uint64_t random = hash_two(host->key ^ UINT64_C(0x17e), position);
    switch (host->style) {
    case 0:
    case 2:
        to = put_number(to, 1000 + position);
        *to++ = '-';
        to = put_word(model, to, random);
        *to++ = '-';
        to = put_word(model, to, random >> 32);
        return PUT_LITERAL(to, ".html");
    case 3:
        to = put_two_digits(to, item / 10);
        to = put_number(to, item % 10);
        *to++ = '-';
        to = put_word(model, to, random);
        *to++ = '-';
        return put_word(model, to, random >> 32);
    case 4:
        to = PUT_LITERAL(to, "view.php?id=");
        to = put_number(to, 10000 + position);
        if (random & 1)
            to = PUT_LITERAL(to, "&lang=en");
        return to;
    case 5:
        to = put_number(to, 100 + item);
        *to++ = '/';
        return put_word(model, to, random);
    case 6:
        to = PUT_LITERAL(to, "item");
        to = put_two_digits(to, item / 100);
        to = put_two_digits(to, item % 100);
        *to++ = '_';
        to = put_word(model, to, random);
        return PUT_LITERAL(to, ".htm");
    default:
        to = put_two_digits(to, 1 + item % 28);
        *to++ = '/';
        to = put_word(model, to, random);
        *to++ = '-';
        to = put_word(model, to, random >> 32);
        *to++ = '-';
        return put_number(to, 500 + item);
    }
}

static inline char *put_url(const struct model *model, struct host *host, char *to, uint64_t position)
{
    to = put(to, host->prefix, host->prefix_bytes);
    return put_path(model, host, to, position);
}

/* The same page in a spelling that its normal form folds. */
static char *put_odd_url(const struct model *model, struct host *host, char *to, uint64_t position, uint64_t random)
{
    char *start = to;
    size_t scheme_bytes = host->prefix[4] == 's' ? 8 : 7;
    switch (random & 7) {
    case 0:
        to = put(to, host->prefix, host->prefix_bytes);
        to = scheme_bytes == 8 ? PUT_LITERAL(to, ":443") : PUT_LITERAL(to, ":80");
        return put_path(model, host, to, position);
    case 1:
        to = put_url(model, host, to, position);
        if (start[scheme_bytes] >= 'a')
            start[scheme_bytes] = (char)(start[scheme_bytes] - 'a' + 'A');
        return to;
    case 2:
        to = put(to, host->prefix, host->prefix_bytes);
        to = PUT_LITERAL(to, "/./x/..");
        return put_path(model, host, to, position);
    default:
        to = put_url(model, host, to, position);
        *to++ = '#';
        return put_word(model, to, random >> 8);
    }
}

/* ---- the model ---- */

static void *allocate(size_t bytes)
{
    void *memory = calloc(1, bytes);
    if (!memory) {
        fprintf(stderr, "crawlgen: out of memory\n");
        exit(WINDROW_RESOURCE);
    }
    return memory;
}

/* Makes the model of a seed; freed by model_free. */
static struct model *model_make(uint64_t seed, bool slow_mixing)
{
    struct model *model = allocate(sizeof *model);
    model->seed = mix(seed ^ GOLDEN);
    model->slow_mixing = slow_mixing;
    for (uint32_t i = 0; i < WORDS; i++) {
        model->word[i].bytes = (uint8_t)strlen(words[i]);
        memcpy(model->word[i].text, words[i], model->word[i].bytes);
    }
    for (uint32_t class = 0; class < CLASSES; class++)
        model->slots += class_slots[class];
    model->slot_class = allocate(model->slots);
    model->slot_phase = allocate(model->slots * sizeof *model->slot_phase);
    uint64_t *weight = allocate(model->slots * sizeof *weight), sum = 0;
    uint32_t slot = 0;
    for (uint32_t class = 0; class < CLASSES; class++)
        for (uint32_t i = 0; i < class_slots[class]; i++, slot++) {
            model->slot_class[slot] = (uint8_t)class;
            model->slot_phase[slot] = hash_two(model->seed ^ UINT64_C(0x9ba5e), slot) & ((UINT64_C(1) << class) - 1);
            weight[slot] = 10000 * (2 + class) / (2 + i);
            sum += weight[slot];
        }
    uint64_t reached = 0;
    slot = 0;
    for (uint64_t entry = 0; entry < POPULARITY_ENTRIES; entry++) {
        while (slot + 1 < model->slots && (reached + weight[slot]) * POPULARITY_ENTRIES <= entry * sum)
            reached += weight[slot++];
        model->popularity[entry] = (uint16_t)slot;
    }
    free(weight);
    model->visit_stride = 167; /* a prime above a third of the slots, and no divisor of them */
    while (model->slots % model->visit_stride == 0)
        model->visit_stride += 2;
    return model;
}

static void model_free(struct model *model)
{
    free(model->slot_class);
    free(model->slot_phase);
    free(model);
}

#endif
