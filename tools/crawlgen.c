/* crawlgen: a synthetic crawl of any size on standard output, the same bytes for the same seed.
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
 * Links.  A fetched page links to all navigation pages of its host, and has a list of its own whose
 *   length has a heavy tail. A list may be copied in part from an earlier page (the copying model of
 *   Kumar, Raghavan, Rajagopalan, Sivakumar, Tomkins & Upfal 2000). Its links go to near neighbours in
 *   path order, the section's index, older positions of the host, or other hosts.
 * Links between hosts.  Slot by a fixed table with a Zipf law (Zipf 1949); round of the host as
 *   now·u^3 for uniform u, so that early hosts collect links as t^(-2/3): the law of age that
 *   preferential attachment gives (Barabási & Albert 1999). Some go to siblings in the same domain,
 *   to hosts of this round, to hosts that are yet to come, or to hosts that are never visited. On the
 *   host: mostly the home page, else a page with a bias to early positions: a long tail of deep links.
 * Dirt.  Pages without links, pages fetched twice, self links, repeated links, spellings that the
 *   normal form has to fold, other schemes, malformed URLs, nofollow (in the shape that can say it).
 * Slow mixing.  Three eighths of the hosts are closed: no link leaves them and all their pages are
 *   fetched. Half of these are one long chain of pages, which goes on into the slot's next host.
 *
 * Random numbers: SplitMix64 (Steele, Lea & Flood 2014, "Fast splittable pseudorandom number
 * generators"; constants of Sebastiano Vigna's public-domain version).
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

struct options {
    uint64_t links;
    uint64_t seed;
    uint64_t threads;
    bool pairs;
    bool slow_mixing;
    bool describe;
};

/* What holds for the whole crawl; read-only once made. */
struct model {
    uint64_t seed;
    bool pairs;
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
    uint32_t section_bits;
    uint32_t style;
    bool closed; /* no link leaves it */
    bool chain;  /* each page links to the next one only */
    uint32_t prefix_bytes;
    char prefix[128]; /* scheme, host */
    uint64_t section; /* whose path is kept in section_text */
    uint32_t section_bytes;
    char section_text[96];
};

/* One round's text under construction; owned by one thread at a time. */
struct piece {
    char *text;
    char *end;   /* behind the last byte written */
    char *limit; /* end of the allocation */
    uint64_t links;
    uint64_t links_max; /* stop here */
    uint64_t round;
    bool ready;
    /* the page being written */
    char source[URL_BYTES_MAX];
    uint32_t source_bytes;
    char last[URL_BYTES_MAX]; /* its last link, for repeating */
    uint32_t last_bytes;
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
    host->navigation = 1 + below_skewed(random >> 20, NAVIGATION_MAX, 1);
    if (host->navigation > 1 + host->block / 2)
        host->navigation = 1 + host->block / 2;
    host->section_bits = 4 + (random >> 52 & 3);
    host->style = random >> 54 & 7;
    host->closed = model->slow_mixing && slot < model->slots && (random >> 57 & 7) < 3;
    host->chain = host->closed && (random >> 60 & 1);
    host->section = UINT64_MAX;
    host_name(model, host);
}

static bool host_fetches(const struct host *host, uint64_t position)
{
    return host->closed || position < host->navigation || !(position & ((UINT64_C(1) << host->section_bits) - 1)) ||
           (hash_two(host->key ^ UINT64_C(0xfe7c4), position) & 0xffff) < 26500;
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
        to = put_word(model, to, random);
        *to++ = '-';
        to = put_word(model, to, random >> 32);
        *to++ = '-';
        return put_number(to, item);
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
        exit(5);
    }
    piece->text = text;
    piece->end = text + used;
    piece->limit = text + size;
}

/* A link in two halves: link_begin writes what stands in front of the target, then the caller writes
 * the target at piece->end, and link_end closes it. */
static inline void link_begin(const struct model *model, struct piece *piece)
{
    piece_reserve(piece, 3 * URL_BYTES_MAX);
    if (model->pairs)
        piece->end = put(piece->end, piece->source, piece->source_bytes);
    *piece->end++ = '\t';
}

static inline void link_end(const struct model *model, struct piece *piece, char *start, char *end)
{
    piece->end = end;
    piece->links++;
    if (model->pairs) {
        /* From the link's number and the page, not from the list's own numbers: both shapes hold the same links. */
        uint64_t random = hash_two(piece->round ^ UINT64_C(0xf0110), piece->links);
        if ((random & 0xffff) < 3300)
            piece->end = random & 0x70000 ? PUT_LITERAL(end, "\tnofollow") : PUT_LITERAL(end, "\tnofollow ugc");
        *piece->end++ = '\n';
    }
    piece->last_bytes = (uint32_t)(end - start);
    memcpy(piece->last, start, piece->last_bytes);
}

static void link_text(const struct model *model, struct piece *piece, const char *text, size_t bytes)
{
    if (piece->links == piece->links_max)
        return;
    link_begin(model, piece);
    char *start = piece->end;
    link_end(model, piece, start, put(start, text, bytes));
}

static void link_position(const struct model *model, struct piece *piece, struct host *host, uint64_t position,
                          uint64_t random)
{
    if (piece->links == piece->links_max)
        return;
    link_begin(model, piece);
    char *start = piece->end;
    link_end(model, piece, start,
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

/* Writes `count` links of the list that belongs to `owner`, a position of the host. */
static void list_write(const struct model *model, struct piece *piece, struct host *host, uint64_t owner,
                       uint64_t count, uint64_t extent)
{
    uint64_t state = hash_two(host->key ^ UINT64_C(0x115), owner);
    for (uint64_t i = 0; i < count && piece->links < piece->links_max; i++) {
        uint64_t random = draw(&state);
        uint32_t choice = random & 1023;
        random >>= 10;
        if (choice < 340 && !host->closed) {
            link_outside(model, piece, host, &state);
        } else if (choice < 850) {
            /* near neighbours: at a distance of 1 + up to 2^b, b geometric; long lists reach further */
            uint64_t reach = UINT64_C(4) << __builtin_ctzll((random >> 32) | 128);
            while (reach < count / 4)
                reach <<= 1;
            uint64_t distance = 1 + (random & (reach - 1));
            /* A little beyond what was visited so far there are pages, too; in closed hosts there are none. */
            uint64_t known = host->closed ? extent : extent + host->block / 2 + 2;
            uint64_t position = owner + distance;
            if ((!(random >> 12 & 1) || position >= known) && owner >= distance)
                position = owner - distance;
            if (position >= known)
                position = 0;
            link_position(model, piece, host, position, random >> 16);
        } else if (choice < 900) {
            link_position(model, piece, host, owner >> host->section_bits << host->section_bits, random);
        } else if (choice < 1000) {
            link_position(model, piece, host, below_skewed(random, extent, 2), random >> 32);
        } else if (choice < 1022) {
            if (piece->last_bytes) {
                char again[URL_BYTES_MAX];
                memcpy(again, piece->last, piece->last_bytes);
                link_text(model, piece, again, piece->last_bytes);
            } else {
                link_position(model, piece, host, 0, random);
            }
        } else {
            const char *bad = bad_targets[below(random, BAD_TARGETS)];
            link_text(model, piece, bad, strlen(bad));
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

static void navigation_write(const struct model *model, struct piece *piece, const struct navigation *navigation,
                             uint64_t count)
{
    if (model->pairs) {
        for (uint64_t i = 0; i < count; i++) {
            uint32_t start = i ? navigation->end[i - 1] : 0;
            link_text(model, piece, navigation->text + start + 1, navigation->end[i] - start - 1);
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
    if (!model->pairs || linkless)
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
        navigation_write(model, piece, navigation, host->navigation);
        uint64_t count = (5 + (random & 7)) << doublings(random >> 8, 20000, 9);
        if (count > LINKS_PER_PAGE_MAX)
            count = LINKS_PER_PAGE_MAX;
        uint64_t copied = 0, distance = 1 + (random >> 24 & 7);
        if ((random >> 28 & 7) < 3 && position >= distance) {
            copied = count * 3 / 4;
            list_write(model, piece, host, position - distance, copied, extent);
        }
        list_write(model, piece, host, position, count - copied, extent);
        if ((random >> 32 & 63) == 0)
            link_text(model, piece, piece->source, piece->source_bytes);
    }
    if (!model->pairs)
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

static void *allocate(size_t bytes)
{
    void *memory = calloc(1, bytes);
    if (!memory) {
        fprintf(stderr, "crawlgen: out of memory\n");
        exit(5);
    }
    return memory;
}

static struct model *model_make(const struct options *options)
{
    struct model *model = allocate(sizeof *model);
    model->seed = mix(options->seed ^ GOLDEN);
    model->pairs = options->pairs;
    model->slow_mixing = options->slow_mixing;
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

static int write_all(const char *text, size_t bytes)
{
    while (bytes) {
        ssize_t wrote = write(STDOUT_FILENO, text, bytes);
        if (wrote < 0 && errno == EINTR)
            continue;
        if (wrote < 0) {
            fprintf(stderr, "crawlgen: standard output: %s\n", strerror(errno));
            return 5;
        }
        text += wrote;
        bytes -= (size_t)wrote;
    }
    return 0;
}

static int crawl_write(const struct model *model, const struct options *options)
{
    struct works works = {.model = model, .count = 2 * options->threads, .links_max = options->links,
                          .lock = PTHREAD_MUTEX_INITIALIZER, .changed = PTHREAD_COND_INITIALIZER};
    works.pieces = allocate(works.count * sizeof *works.pieces);
    pthread_t threads[THREADS_MAX];
    uint64_t started = 0;
    int status = 0;
    for (; started < options->threads; started++) {
        int error = pthread_create(&threads[started], NULL, works_run, &works);
        if (error) {
            fprintf(stderr, "crawlgen: cannot start a thread: %s\n", strerror(error));
            status = 5;
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
    "            the others are the frontier, seen as targets only. 3 % of the fetched have no links.\n"
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
    "Measured at 2 million links, seed 1, after the link rules: 207,000 pages on 9,200 hosts (5,200 of them\n"
    "fetched), 57 % of the pages in the frontier, 41 % with kept links, 18 kept links for each of these,\n"
    "7.5 for each page; 73 % of them inside the host; 19 % of all link fields are repetitions, 2.9 % self\n"
    "links, 0.14 % malformed or of another scheme. Mean URL: 62 bytes.\n";

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
    argp_err_exit_status = 2;
    argp_parse(&parser, argc, argv, 0, NULL, &options);
    if (options.describe)
        return fputs(description, stdout) < 0 || fflush(stdout) ? 5 : 0;
    struct model *model = model_make(&options);
    int status = crawl_write(model, &options);
    free(model->slot_class);
    free(model->slot_phase);
    free(model);
    return status;
}
