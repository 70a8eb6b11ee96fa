#include "ranking.h"

#include <setjmp.h>
#include <stdarg.h>
#include <cmocka.h>
#include <jansson.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "memory.h"
#include "program.h"
#include "scratch.h"

/* ---- the text of `score` ---- */

static const char score_header[] = "url\tplace\trange\tscore\tmean_multiple";

/* The next TAB-separated field of a row, ended with '\0'; fails the test when there is none. */
static char *next_field(char **row)
{
    char *field = *row;
    if (field == NULL)
        fail_msg("a row of `score` has too few fields");
    char *end = strchr(field, '\t');
    *row = end != NULL ? end + 1 : NULL;
    if (end != NULL)
        *end = '\0';
    return field;
}

static uint64_t whole_number(const char *field, char **end)
{
    if (*field < '1' || *field > '9')
        fail_msg("\"%s\" is not a place", field);
    return strtoull(field, end, 10);
}

static double real_number(const char *field)
{
    char *end;
    double value = strtod(field, &end);
    if (end == field || *end != '\0' || !isfinite(value))
        fail_msg("\"%s\" is not a number", field);
    return value;
}

static struct ranked_page parse_row(char *row)
{
    struct ranked_page page = {0};
    char *end;
    page.url = next_field(&row);
    char *place = next_field(&row);
    page.place = whole_number(place, &end);
    assert_int_equal(*end, '\0');
    char *range = next_field(&row);
    page.range_first = page.range_last = whole_number(range, &end);
    if (*end == '-')
        page.range_last = whole_number(end + 1, &end);
    if (*end != '\0' || page.range_first > page.range_last)
        fail_msg("\"%s\" is not a range", range);
    page.score = real_number(next_field(&row));
    page.mean_multiple = real_number(next_field(&row));
    return page;
}

struct ranking ranking_parse(char *text)
{
    struct ranking ranking = {.text = text};
    char *next = text;
    for (size_t line = 0; *next != '\0'; line++) {
        char *row = next, *end = strchr(next, '\n');
        if (end == NULL)
            fail_msg("the last row of `score` has no end");
        *end = '\0';
        next = end + 1;
        if (line == 0) {
            if (strncmp(row, score_header, sizeof score_header - 1) != 0)
                fail_msg("the header is \"%s\"", row);
            continue;
        }
        ranking.pages = memory_resize(ranking.pages, line, sizeof *ranking.pages);
        ranking.pages[ranking.page_count++] = parse_row(row);
    }
    return ranking;
}

void ranking_free(struct ranking *ranking)
{
    free(ranking->pages);
    free(ranking->text);
    *ranking = (struct ranking){0};
}

struct ranking ranking_read(const char *store, const char *run_name)
{
    struct outcome outcome = WINDROW("score", store, "--all", "--run", run_name != NULL ? run_name : "main");
    outcome_expect(&outcome, 0);
    struct ranking ranking = ranking_parse(outcome.out);
    outcome.out = NULL;
    outcome_free(&outcome);
    return ranking;
}

/* ---- status ---- */

static double json_key(const json_t *status, const char *key)
{
    const json_t *value = json_object_get(status, key);
    if (!json_is_number(value))
        fail_msg("`status --json` has no number \"%s\"", key);
    return json_number_value(value);
}

struct certificate certificate_read(const char *store, const char *run_name)
{
    struct outcome outcome = WINDROW("status", store, "--json", "--run", run_name != NULL ? run_name : "main");
    outcome_expect(&outcome, 0);
    json_error_t error;
    json_t *status = json_loads(outcome.out, 0, &error);
    if (status == NULL)
        fail_msg("`status --json` is no JSON: %s", error.text);
    struct certificate certificate = {
        .error_l1 = json_key(status, "error_l1"),
        .alpha = json_key(status, "alpha"),
        .rho = json_key(status, "rho"),
        .digits = json_key(status, "digits"),
        .pages = (uint64_t)json_key(status, "pages"),
        .links = (uint64_t)json_key(status, "links"),
    };
    json_decref(status);
    outcome_free(&outcome);
    return certificate;
}

/* ---- a web as a dump ---- */

void naming_write(char url[NAMING_BYTES], enum naming naming, uint32_t page)
{
    uint32_t scattered = page * 2654435761u; /* odd, so a renaming: Knuth's multiplicative hash */
    uint32_t host = 0;
    switch (naming) {
    case NAMING_FEW_HOSTS:
        while ((1u << host) * 3 - 3 <= page) /* hosts of 3, 6, 12, 24 … pages */
            host++;
        snprintf(url, NAMING_BYTES, "http://h%u.example/p%u", host, page);
        break;
    case NAMING_SCATTERED:
        snprintf(url, NAMING_BYTES, "https://s%u.test/%08x/%u", scattered >> 29, scattered, page);
        break;
    case NAMING_ONE_HOST:
        snprintf(url, NAMING_BYTES, "http://one.example/p%u", page);
        break;
    case NAMING_HOST_EACH:
        snprintf(url, NAMING_BYTES, "http://h%u.example/", page);
        break;
    }
}

void ranking_write_dump(const char *path, const struct graph *graph, enum naming naming)
{
    uint32_t *degrees = graph_out_degrees(graph);
    char *text = NULL;
    size_t text_bytes = 0;
    FILE *dump = open_memstream(&text, &text_bytes);
    char source[NAMING_BYTES], target[NAMING_BYTES];
    for (uint32_t page = 0; page < graph->page_count; page++)
        if (degrees[page] == 0) {
            naming_write(source, naming, page);
            fprintf(dump, "%s\n", source);
        }
    for (size_t i = 0; i < graph->link_count; i++) {
        naming_write(source, naming, graph->links[i].source);
        naming_write(target, naming, graph->links[i].target);
        fprintf(dump, "%s\t%s\n", source, target);
    }
    fclose(dump);
    scratch_write(path, text, text_bytes);
    free(text);
    free(degrees);
}

/* ---- the whole way ---- */

struct name {
    char url[NAMING_BYTES];
    uint32_t page;
};

static int name_order(const void *left, const void *right)
{
    return strcmp(((const struct name *)left)->url, ((const struct name *)right)->url);
}

static void scores_by_page(const struct ranking *ranking, enum naming naming, uint32_t page_count, long double *scores)
{
    if (ranking->page_count != page_count)
        fail_msg("%zu pages were ranked, expected %u", ranking->page_count, page_count);
    struct name *names = memory_array(page_count, sizeof *names);
    for (uint32_t page = 0; page < page_count; page++) {
        naming_write(names[page].url, naming, page);
        names[page].page = page;
        scores[page] = -1;
    }
    qsort(names, page_count, sizeof *names, name_order);
    for (size_t i = 0; i < page_count; i++) {
        struct name wanted = {0};
        snprintf(wanted.url, sizeof wanted.url, "%s", ranking->pages[i].url);
        const struct name *found = bsearch(&wanted, names, page_count, sizeof *names, name_order);
        if (found == NULL || scores[found->page] != -1)
            fail_msg("%s was not asked for, or comes twice", ranking->pages[i].url);
        scores[found->page] = ranking->pages[i].score;
    }
    free(names);
}

void ranking_ask(const char *directory, const char *name, const struct graph *graph, enum naming naming, double beta,
                 const char *digits, long double *scores, struct certificate *certificate)
{
    char *store = scratch_path(directory, name);
    char *dump = memory_text("%s.tsv", store);
    char beta_text[32];
    snprintf(beta_text, sizeof beta_text, "%.17g", beta);
    ranking_write_dump(dump, graph, naming);
    MUST_WINDROW("shard", "--quiet", "--shape", "pairs", "--out", store, dump);
    MUST_WINDROW("rank", "--quiet", "--beta", beta_text, "--digits", digits, store);
    struct ranking ranking = ranking_read(store, NULL);
    scores_by_page(&ranking, naming, graph->page_count, scores);
    if (certificate != NULL)
        *certificate = certificate_read(store, NULL);
    ranking_free(&ranking);
    free(store);
    free(dump);
}

void ranking_expect_certified(const char *what, const long double *scores, const long double *truth,
                              size_t page_count, const struct certificate *certificate, double digits)
{
    const long double printed = 2e-16L; /* 17 significant digits name the double exactly; half an ulp of slack */
    long double distance = 0;
    if (certificate->digits < digits || certificate->rho > pow(10, -digits) * (1 + 1e-12))
        fail_msg("%s: %g digits (rho %g) are proven, %g were asked for", what, certificate->digits, certificate->rho,
                 digits);
    for (size_t page = 0; page < page_count; page++) {
        long double error = fabsl(scores[page] - truth[page]);
        distance += error;
        if (error > certificate->rho * truth[page] + printed * truth[page])
            fail_msg("%s: page %zu: %.17Lg, in truth %.17Lg, farther off than rho %g", what, page, scores[page],
                     truth[page], certificate->rho);
        if (error > certificate->alpha + printed * truth[page])
            fail_msg("%s: page %zu is %Lg off, more than alpha %g", what, page, error, certificate->alpha);
    }
    if (distance > certificate->error_l1 + printed)
        fail_msg("%s: the scores are %Lg off in all, more than error_l1 %g", what, distance, certificate->error_l1);
}
