#include "oracle.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "memory.h"

static long double entry(const long double *vector, uint32_t page, uint32_t page_count)
{
    return vector != NULL ? vector[page] : 1.0L / page_count;
}

static void sweep(const struct oracle_question *question, const uint32_t *degrees, const long double *scores,
                  long double *next)
{
    const struct graph *graph = question->graph;
    long double dangling_mass = 0;
    for (uint32_t page = 0; page < graph->page_count; page++)
        if (degrees[page] == 0)
            dangling_mass += scores[page];
    for (uint32_t page = 0; page < graph->page_count; page++)
        next[page] = (1 - question->beta) * entry(question->jump, page, graph->page_count) +
                     question->beta * dangling_mass * entry(question->dangling, page, graph->page_count);
    for (size_t i = 0; i < graph->link_count; i++) {
        uint32_t source = graph->links[i].source;
        next[graph->links[i].target] += question->beta * scores[source] / degrees[source];
    }
}

void oracle_sweep(const struct oracle_question *question, const long double *scores, long double *next)
{
    uint32_t *degrees = graph_out_degrees(question->graph);
    sweep(question, degrees, scores, next);
    free(degrees);
}

void oracle_power(const struct oracle_question *question, long double *scores)
{
    uint32_t page_count = question->graph->page_count;
    uint32_t *degrees = graph_out_degrees(question->graph);
    long double *next = memory_array(page_count, sizeof *next);
    long sweeps = (long)ceill(logl(1e-19L) / logl(question->beta));
    for (uint32_t page = 0; page < page_count; page++)
        scores[page] = entry(question->jump, page, page_count);
    for (long i = 0; i < sweeps; i++) {
        sweep(question, degrees, scores, next);
        memcpy(scores, next, page_count * sizeof *scores);
    }
    free(next);
    free(degrees);
}

/* Row i of the augmented matrix says what page i's score must satisfy; column n is the right side. */
static long double *equations(const struct oracle_question *question)
{
    const struct graph *graph = question->graph;
    size_t n = graph->page_count, width = n + 1;
    uint32_t *degrees = graph_out_degrees(graph);
    long double *matrix = memory_array(n * width, sizeof *matrix);
    for (uint32_t row = 0; row < n; row++) {
        matrix[row * width + row] += 1;
        matrix[row * width + n] = (1 - question->beta) * entry(question->jump, row, graph->page_count);
        for (uint32_t column = 0; column < n; column++)
            if (degrees[column] == 0)
                matrix[row * width + column] -= question->beta * entry(question->dangling, row, graph->page_count);
    }
    for (size_t i = 0; i < graph->link_count; i++) {
        uint32_t source = graph->links[i].source;
        matrix[graph->links[i].target * width + source] -= question->beta / degrees[source];
    }
    if (question->beta == 1)
        for (size_t column = 0; column <= n; column++)
            matrix[(n - 1) * width + column] = 1;
    free(degrees);
    return matrix;
}

static void swap_rows(long double *matrix, size_t width, size_t a, size_t b)
{
    for (size_t column = 0; column < width && a != b; column++) {
        long double kept = matrix[a * width + column];
        matrix[a * width + column] = matrix[b * width + column];
        matrix[b * width + column] = kept;
    }
}

void oracle_solve(const struct oracle_question *question, long double *scores)
{
    size_t n = question->graph->page_count, width = n + 1;
    long double *matrix = equations(question);
    for (size_t step = 0; step < n; step++) {
        size_t pivot = step;
        for (size_t row = step + 1; row < n; row++)
            if (fabsl(matrix[row * width + step]) > fabsl(matrix[pivot * width + step]))
                pivot = row;
        swap_rows(matrix, width, step, pivot);
        if (matrix[step * width + step] == 0)
            abort(); /* the question has no single answer */
        for (size_t row = step + 1; row < n; row++) {
            long double factor = matrix[row * width + step] / matrix[step * width + step];
            for (size_t column = step; column < width && factor != 0; column++)
                matrix[row * width + column] -= factor * matrix[step * width + column];
        }
    }
    for (size_t row = n; row-- > 0;) {
        long double right = matrix[row * width + n];
        for (size_t column = row + 1; column < n; column++)
            right -= matrix[row * width + column] * scores[column];
        scores[row] = right / matrix[row * width + row];
    }
    free(matrix);
}

long double oracle_distance(const long double *a, const long double *b, size_t page_count)
{
    long double sum = 0;
    for (size_t page = 0; page < page_count; page++)
        sum += fabsl(a[page] - b[page]);
    return sum;
}
