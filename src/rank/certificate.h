/* certificate: what is proven about the error of a vector of scores.
 *
 * Let Q be the column-stochastic matrix of the ranking (dangling pages jump by the jump vector v), x the
 * scores handed out, x* the true ones, and q = (1-beta)v + beta Qx - x the residual of exactly these
 * scores. Then x* - x = (I - beta Q)^-1 q. So
 *
 *   error_l1 = |q|_1 / (1-beta)  bounds the sum of all errors, and half of it every single one (the errors
 *              sum to 1 - sum(x), which is rounding);
 *   and where |q_i| <= rho_part (1-beta) v_i + epsilon x_i for all i, rho_part < 1,
 *              |x*_i - x_i| <= rho_part x*_i + epsilon kappa_i x_i,
 *              kappa_i = K_i (1+epsilon)^K_i + 1/(1-beta),  K_i >= ln(1/x_i) / ln(1/beta).
 *
 * The latter holds since (I - beta Q)^-1 is non-negative and takes (1-beta)v to x*, while (beta Q)^k x is
 * at most (1+epsilon)^k x in every entry and at most beta^k in sum; K_i terms are bounded one way, the
 * rest the other. Here K_i is taken as ln(1/x_i)/ln(1/beta) + 1 without rounding, so that the bounds of an
 * interval grow with x. Rounding in the evaluation of q is bounded and added to |q|.
 *
 * Threads: a table is filled by one thread; finished certificates may be shared.
 */
#ifndef WINDROW_RANK_CERTIFICATE_H
#define WINDROW_RANK_CERTIFICATE_H

#include <stdbool.h>
#include <stdint.h>

struct windrow_certificate {
    double beta;
    double error_l1;       /* at most this is the sum of |x*_i - x_i| */
    double alpha;          /* at most this is any |x*_i - x_i| */
    double rho;            /* at most this is any |x*_i - x_i| / x*_i; infinite when nothing is proven */
    double rho_part;       /* the pair behind rho */
    double epsilon;
    double rounding_l1;    /* of error_l1, what is bounded rounding: less cannot be proven */
    double rounding_rho;   /* the rho that would be proven if the residual were nothing but rounding */
    double least_score;    /* smallest positive score */
};

/* -log10(rho), 0 when nothing is proven. */
double windrow_certificate_digits(const struct windrow_certificate *certificate);

/* The interval in which the true score of a page lies whose score is `score` >= 0. Both ends grow with score. */
void windrow_certificate_interval(const struct windrow_certificate *certificate, double score, double *low, double *high);

/* Classes of pages by x/v, four to a factor of two. Class 0 is everything below, the last one everything
 * above, pages with v = 0 among them. */
enum { WINDROW_CLASS_LEAST = -24, WINDROW_CLASS_OCTAVES = 88, WINDROW_CLASSES = WINDROW_CLASS_OCTAVES * 4 + 2 };

/* The largest |q|/x, and the largest part of it that is rounding, of each class; and the smallest x. */
struct windrow_class_table {
    double residual[WINDROW_CLASSES];
    double rounding[WINDROW_CLASSES];
    double least_score;
};

void windrow_class_table_clear(struct windrow_class_table *table);
/* The class of a page; ratio = x/v, infinity where v = 0. */
unsigned windrow_class_of(double ratio);
/* Least v/x that a page of the class can have. */
double windrow_class_least_jump(unsigned page_class);
/* Takes the larger of both tables, entry by entry. */
void windrow_class_table_join(struct windrow_class_table *table, const struct windrow_class_table *other);

/* Chooses the pair that proves the smallest rho, and completes the certificate from these numbers:
 * residual_l1 = sum of |q| with rounding, rounding_l1 = its rounding, sum_error bounds |1 - sum(x)|. */
void windrow_certificate_make(struct windrow_certificate *certificate, double beta, const struct windrow_class_table *table,
                              double residual_l1, double rounding_l1, double sum_error);

#endif
