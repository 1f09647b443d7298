/* A density whose logarithm is a cubic spline between two thresholds, with a tail beyond each: likeliest coefficients
 * for given knots and tails. */
#ifndef LM_LOG_SPLINE_H
#define LM_LOG_SPLINE_H

#include "../limen.h"

enum { LM_SPLINE_PIECES = 160 };

/* That much of a reading is spread evenly between the thresholds, so that no piece without readings has density 0. */
static const double lm_log_spline_spread = 0.5;

typedef struct {
    size_t pieces;
    double knot[LM_SPLINE_PIECES + 1];
    double moment[LM_SPLINE_PIECES][4]; /* sums of 1, t, t^2, t^3 over a piece's readings, t from 0 to 1 on it */
    double beyond[2];                   /* readings below the first and above the last knot */
    double tail_scale[2];               /* mass of a tail whose density at the threshold is 1 */
    double total;
} lm_spline_readings;

typedef struct {
    size_t pieces;
    double knot[LM_SPLINE_PIECES + 1];
    double basis[LM_SPLINE_PIECES][4][4];  /* of each piece: the four B-splines there, by powers of t */
    double theta[LM_SPLINE_PIECES + 3];    /* coefficients of the B-splines */
    double factor[LM_SPLINE_PIECES + 3][4]; /* Cholesky factor of the information of one reading, by rows */
    double log_norm;                       /* log of the integral of exp(spline) and its tails */
    double log_likelihood;                 /* of all readings, the shape of the tails left out */
} lm_log_spline;

/* Lays the knots and the B-splines on them. theta is left alone. */
void lm_log_spline_lay(lm_log_spline *spline, const double knot[], size_t pieces);

/* theta at which the spline passes near a crude density of the readings, or near another spline. */
void lm_log_spline_start(lm_log_spline *spline, const lm_spline_readings *data);
void lm_log_spline_follow(lm_log_spline *spline, const lm_log_spline *other);

/* Climbs to the top of the likelihood, which is concave, by Newton's method; spline and data have the same knots. */
void lm_log_spline_climb(lm_log_spline *spline, const lm_spline_readings *data);

/* By how much twice the log likelihood would fall, nearly, if the inner knot (1 <= knot < pieces) were taken away:
 * Wald's statistic of the jump of the third derivative there. */
double lm_log_spline_worth(const lm_log_spline *spline, size_t knot, double total);

/* Coefficients by powers of t of the spline on a piece. */
void lm_log_spline_piece(const lm_log_spline *spline, size_t piece, double c[4]);

#endif
