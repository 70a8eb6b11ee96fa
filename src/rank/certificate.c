#include "rank/certificate.h"

#include <math.h>
#include <string.h>

/* Covers the few roundings in the formulas of this file. */
static const double upwards = 1 + 1e-12, downwards = 1 - 1e-12;

void windrow_class_table_clear(struct windrow_class_table *table)
{
    memset(table, 0, sizeof *table);
    table->least_score = INFINITY;
}

unsigned windrow_class_of(double ratio)
{
    /* The exponent and the two highest bits behind the point, as one number. */
    uint64_t bits;
    memcpy(&bits, &ratio, sizeof bits);
    int64_t quarter = (int64_t)(bits >> 50) - (int64_t)(1023 + WINDROW_CLASS_LEAST) * 4;
    return quarter < 0 ? 0 : quarter >= WINDROW_CLASSES - 2 ? WINDROW_CLASSES - 1 : (unsigned)quarter + 1;
}

double windrow_class_least_jump(unsigned page_class)
{
    if (page_class == WINDROW_CLASSES - 1)
        return 0;
    /* The class ends where the next begins: at 2^octave * (1 + quarter/4). */
    double end = ldexp(1 + (page_class % 4) / 4.0, WINDROW_CLASS_LEAST + (int)(page_class / 4));
    return downwards / end;
}

void windrow_class_table_join(struct windrow_class_table *table, const struct windrow_class_table *other)
{
    for (unsigned c = 0; c < WINDROW_CLASSES; c++) {
        table->residual[c] = fmax(table->residual[c], other->residual[c]);
        table->rounding[c] = fmax(table->rounding[c], other->rounding[c]);
    }
    table->least_score = fmin(table->least_score, other->least_score);
}

static double kappa(double beta, double epsilon, double score)
{
    double terms = score < 1 ? log(score) / log(beta) + 1 : 1;
    return (terms * pow(1 + epsilon, terms) + 1 / (1 - beta)) * upwards;
}

/* The least rho_part that goes with an epsilon; infinite when there is none. */
static double matching_rho_part(double beta, const double *residuals, double epsilon)
{
    double rho_part = 0;
    for (unsigned c = 0; c < WINDROW_CLASSES; c++) {
        if (residuals[c] <= epsilon)
            continue;
        double jump = (1 - beta) * windrow_class_least_jump(c);
        if (jump == 0)
            return INFINITY;
        rho_part = fmax(rho_part, (residuals[c] - epsilon) * upwards / jump);
    }
    return rho_part;
}

static double proven_rho(double beta, const double *residuals, double epsilon, double least_score, double *rho_part)
{
    *rho_part = matching_rho_part(beta, residuals, epsilon);
    double rest = epsilon * kappa(beta, epsilon, least_score);
    /* Beyond a half the bounds of an interval need not grow with the score any more. */
    if (!(*rho_part <= 0.5 && rest <= 0.5))
        return INFINITY;
    return (*rho_part + rest) / (1 - fmax(*rho_part, rest)) * upwards;
}

/* The bound is nearly convex in epsilon: a walk over powers, then a finer one around the best. Any epsilon
 * gives a true bound. */
static double choose(double beta, const double *residuals, double least_score, double *best_rho_part, double *best_epsilon)
{
    double largest = 0, best = INFINITY, rho_part;
    for (unsigned c = 0; c < WINDROW_CLASSES; c++)
        largest = fmax(largest, residuals[c]);
    *best_epsilon = largest;
    best = proven_rho(beta, residuals, largest, least_score, best_rho_part);
    double centre = largest;
    for (double step = 0.5; step < 0.9999; step = sqrt(step)) {
        for (int i = step == 0.5 ? 0 : -4; i < (step == 0.5 ? 60 : 5); i++) {
            double epsilon = centre * pow(step, i), rho = proven_rho(beta, residuals, epsilon, least_score, &rho_part);
            if (rho < best) {
                best = rho;
                *best_rho_part = rho_part;
                *best_epsilon = epsilon;
            }
        }
        centre = *best_epsilon;
    }
    return best;
}

void windrow_certificate_make(struct windrow_certificate *certificate, double beta, const struct windrow_class_table *table,
                              double residual_l1, double rounding_l1, double sum_error)
{
    *certificate = (struct windrow_certificate){
        .beta = beta,
        .error_l1 = residual_l1 / (1 - beta) * upwards,
        .rounding_l1 = rounding_l1 / (1 - beta) * upwards,
        .least_score = table->least_score,
    };
    certificate->alpha = (certificate->error_l1 + sum_error) / 2 * upwards;
    double rho_part, epsilon;
    certificate->rounding_rho = choose(beta, table->rounding, table->least_score, &rho_part, &epsilon);
    certificate->rho = choose(beta, table->residual, table->least_score, &certificate->rho_part, &certificate->epsilon);
}

double windrow_certificate_digits(const struct windrow_certificate *certificate)
{
    return certificate->rho < 1 ? -log10(certificate->rho) : 0;
}

void windrow_certificate_interval(const struct windrow_certificate *certificate, double score, double *low, double *high)
{
    *low = *high = 0;
    if (!(score > 0))
        return; /* not reached from the jump vector: exactly 0 */
    *low = fmax(0, (score - certificate->alpha) - score * 1e-15);
    *high = (score + certificate->alpha) + score * 1e-15;
    if (!isfinite(certificate->rho))
        return;
    double rest = certificate->epsilon * kappa(certificate->beta, certificate->epsilon, score);
    *low = fmax(*low, score * (1 - rest) / (1 + certificate->rho_part) * downwards);
    *high = fmin(*high, score * (1 + rest) / (1 - certificate->rho_part) * upwards);
}
