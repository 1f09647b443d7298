/* Log-spline density estimation (C. Kooperberg, C. J. Stone, Comput. Statist. Data Anal. 12, 1991, 327-347) with tails.
 *
 * With N readings and B-splines B_j the log likelihood is sum_j theta_j T_j - N log Z(theta), where T_j is the sum of
 * B_j over the readings: its gradient is T - N E[B] and its curvature -N (A - e e'), A = E[B B'], e = E[B]. Since the
 * B-splines add up to 1, A 1 = e, and both the gradient and every contrast of theta are orthogonal to 1; for those
 * right-hand sides the singular matrix A - e e' may be replaced by A, which has bandwidth 3.
 */
#include "log_spline.h"

#include <float.h>
#include <math.h>
#include <string.h>

#include "../numeric/cubic.h"

enum { NODES = 12, POWERS = 7 };

/* Gauss-Legendre on 0..1; Abramowitz and Stegun 25.4.30. */
static const double node[NODES] = {
    0.009219682876640375, 0.04794137181476257, 0.11504866290284765, 0.20634102285669129, 0.31608425050090994,
    0.43738329574426554,  0.56261670425573446, 0.68391574949909006, 0.79365897714330871, 0.88495133709715235,
    0.95205862818523743,  0.99078031712335963};
static const double weight[NODES] = {
    0.023587668193255913, 0.053469662997659213, 0.080039164271673111, 0.10158371336153296, 0.11674626826917740,
    0.12457352290670139,  0.12457352290670139,  0.11674626826917740,  0.10158371336153296, 0.080039164271673111,
    0.053469662997659213, 0.023587668193255913};

/* Knot of the sequence in which the ends count four times. */
static double sequence(const lm_log_spline *spline, ptrdiff_t i)
{
    ptrdiff_t last = (ptrdiff_t)spline->pieces;
    return spline->knot[i < 0 ? 0 : i > last ? last : i];
}

/* The four B-splines of a piece at x, by de Boor's recurrence. */
static void b_splines(const lm_log_spline *spline, size_t piece, double x, double out[4])
{
    ptrdiff_t i = (ptrdiff_t)piece;
    out[0] = 1;
    for (ptrdiff_t degree = 1; degree <= 3; degree++) {
        double carried = 0;
        for (ptrdiff_t k = 0; k < degree; k++) {
            double right = sequence(spline, i + 1 + k), left = sequence(spline, i + 1 + k - degree);
            double share = out[k] / (right - left);
            out[k] = carried + (right - x) * share;
            carried = (x - left) * share;
        }
        out[degree] = carried;
    }
}

void lm_log_spline_lay(lm_log_spline *spline, const double knot[], size_t pieces)
{
    spline->pieces = pieces;
    memcpy(spline->knot, knot, (pieces + 1) * sizeof *knot);
    for (size_t i = 0; i < pieces; i++) {
        double at[4][4], low = knot[i], high = knot[i + 1];
        b_splines(spline, i, low, at[0]);
        b_splines(spline, i, low + (high - low) / 3, at[1]);
        b_splines(spline, i, low + (high - low) / 3 * 2, at[2]);
        b_splines(spline, i, high, at[3]);
        for (int k = 0; k < 4; k++) { /* the cubic through its values at t = 0, 1/3, 2/3, 1 */
            double f = at[0][k], g = at[1][k], h = at[2][k], e = at[3][k], *c = spline->basis[i][k];
            c[0] = f;
            c[1] = -5.5 * f + 9 * g - 4.5 * h + e;
            c[2] = 9 * f - 22.5 * g + 18 * h - 4.5 * e;
            c[3] = -4.5 * f + 13.5 * g - 13.5 * h + 4.5 * e;
        }
    }
}

void lm_log_spline_piece(const lm_log_spline *spline, size_t piece, double c[4])
{
    for (int power = 0; power < 4; power++) {
        c[power] = 0;
        for (size_t k = 0; k < 4; k++)
            c[power] += spline->basis[piece][k][power] * spline->theta[piece + k];
    }
}

/* Where coefficient j takes hold (Greville): a spline with theta_j = f there follows f. */
static double hold(const lm_log_spline *spline, size_t j)
{
    ptrdiff_t i = (ptrdiff_t)j;
    return sequence(spline, i - 2) / 3 + sequence(spline, i - 1) / 3 + sequence(spline, i) / 3;
}

static size_t piece_of(const double knot[], size_t pieces, double x)
{
    size_t low = 0, high = pieces;
    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        if (x >= knot[middle])
            low = middle;
        else
            high = middle;
    }
    return low;
}

void lm_log_spline_start(lm_log_spline *spline, const lm_spline_readings *data)
{
    double level[LM_SPLINE_PIECES];
    for (size_t i = 0; i < data->pieces; i++)
        level[i] = log((data->moment[i][0] + lm_log_spline_spread) / data->total) -
                   log(data->knot[i + 1] - data->knot[i]);
    for (size_t j = 0; j < spline->pieces + 3; j++)
        spline->theta[j] = level[piece_of(data->knot, data->pieces, hold(spline, j))];
}

void lm_log_spline_follow(lm_log_spline *spline, const lm_log_spline *other)
{
    for (size_t j = 0; j < spline->pieces + 3; j++) {
        double x = hold(spline, j), c[4];
        size_t i = piece_of(other->knot, other->pieces, x);
        lm_log_spline_piece(other, i, c);
        spline->theta[j] = lm_cubic(c, (x - other->knot[i]) / (other->knot[i + 1] - other->knot[i]));
    }
}

/* Integrals of t^k exp(cubic - top), k = 0..6, over part of a piece: in panels on which the cubic varies by 5 at most,
 * where 12 nodes give 11 digits; below `floor` nothing counts. */
static void integrate(const double c[4], double low, double high, double top, double floor, double out[POWERS])
{
    lm_range range = lm_cubic_range(c, low, high);
    if (range.high < floor)
        return;
    if (range.high - range.low > 5 && high - low > 1e-9) {
        double middle = 0.5 * (low + high);
        integrate(c, low, middle, top, floor, out);
        integrate(c, middle, high, top, floor, out);
        return;
    }
    for (int i = 0; i < NODES; i++) {
        double t = low + (high - low) * node[i], value = (high - low) * weight[i] * exp(lm_cubic(c, t) - top);
        for (int k = 0; k < POWERS; k++, value *= t)
            out[k] += value;
    }
}

typedef struct {
    double share[LM_SPLINE_PIECES][POWERS]; /* expectations of t^k on each piece */
    double tail[2];                         /* probabilities of the tails */
    double log_norm;
    double likelihood;
} law;

/* log Z and the expectations for theta, and the likelihood given sums[j] = T_j. */
static void evaluate(const lm_log_spline *spline, const lm_spline_readings *data, const double sums[], law *out)
{
    size_t count = spline->pieces + 3;
    double c[LM_SPLINE_PIECES][4], top = -INFINITY, floor = -INFINITY, sum = 0;
    double end[2] = {spline->theta[0] + log(data->tail_scale[0]), spline->theta[count - 1] + log(data->tail_scale[1])};
    for (size_t i = 0; i < spline->pieces; i++) {
        double width = log(spline->knot[i + 1] - spline->knot[i]);
        lm_log_spline_piece(spline, i, c[i]);
        c[i][0] += width;
        lm_range range = lm_cubic_range(c[i], 0, 1);
        top = fmax(top, range.high);
        floor = fmax(floor, range.low);
    }
    top = fmax(top, fmax(end[0], end[1]));
    floor = fmax(floor, fmax(end[0], end[1])) - 40; /* exp(-40) of a part of the whole is below its rounding */
    memset(out->share, 0, spline->pieces * sizeof out->share[0]);
    for (size_t i = 0; i < spline->pieces; i++) {
        integrate(c[i], 0, 1, top, floor, out->share[i]);
        sum += out->share[i][0];
    }
    for (int side = 0; side < 2; side++)
        sum += out->tail[side] = exp(end[side] - top);
    for (size_t i = 0; i < spline->pieces; i++)
        for (int k = 0; k < POWERS; k++)
            out->share[i][k] /= sum;
    out->tail[0] /= sum;
    out->tail[1] /= sum;
    out->log_norm = log(sum) + top;
    out->likelihood = 0;
    for (size_t j = 0; j < count; j++)
        out->likelihood += sums[j] * (spline->theta[j] - out->log_norm);
}

/* T_j: sums of the B-splines over the readings, of which those in a tail stand at its threshold. */
static void sums_of(const lm_log_spline *spline, const lm_spline_readings *data, double sums[])
{
    size_t count = spline->pieces + 3;
    double length = spline->knot[spline->pieces] - spline->knot[0];
    memset(sums, 0, count * sizeof *sums);
    for (size_t i = 0; i < spline->pieces; i++) {
        double even = lm_log_spline_spread * ((spline->knot[i + 1] - spline->knot[i]) / length);
        for (size_t k = 0; k < 4; k++)
            for (int power = 0; power < 4; power++)
                sums[i + k] += spline->basis[i][k][power] * (data->moment[i][power] + even / (power + 1));
    }
    sums[0] += data->beyond[0];
    sums[count - 1] += data->beyond[1];
}

/* e = E[B], and the Cholesky factor of A = E[B B'] by rows (factor[j][k] belongs to columns j, k = 3 and before it). */
static void expect(lm_log_spline *spline, const law *at, double mean[])
{
    size_t count = spline->pieces + 3;
    double(*a)[4] = spline->factor;
    memset(mean, 0, count * sizeof *mean);
    memset(a, 0, count * sizeof *a);
    for (size_t i = 0; i < spline->pieces; i++) {
        for (size_t row = 0; row < 4; row++) {
            double lifted[4] = {0}; /* E of the row's B-spline times t^power */
            for (size_t power = 0; power < 4; power++)
                for (size_t k = 0; k < 4; k++)
                    lifted[power] += spline->basis[i][row][k] * at->share[i][power + k];
            mean[i + row] += lifted[0];
            for (size_t column = 0; column <= row; column++)
                for (size_t power = 0; power < 4; power++)
                    a[i + row][3 - row + column] += spline->basis[i][column][power] * lifted[power];
        }
    }
    mean[0] += at->tail[0];
    mean[count - 1] += at->tail[1];
    a[0][3] += at->tail[0];
    a[count - 1][3] += at->tail[1];
    for (size_t j = 0; j < count; j++) {
        for (size_t k = j < 3 ? 3 - j : 0; k < 3; k++) { /* column j - 3 + k */
            size_t column = j + k - 3;
            for (size_t m = j < 3 ? 3 - j : 0; m < k; m++)
                a[j][k] -= a[j][m] * a[column][m + 3 - k];
            a[j][k] /= a[column][3];
        }
        double rest = a[j][3];
        for (size_t k = 0; k < 3; k++)
            rest -= a[j][k] * a[j][k];
        /* A B-spline over a gap may lose all its probability on the way up: the pivot stays above rounding. */
        a[j][3] = sqrt(fmax(rest, DBL_EPSILON * DBL_EPSILON));
    }
}

/* L y = b in place. */
static void forward(const lm_log_spline *spline, double b[], size_t first)
{
    for (size_t j = first; j < spline->pieces + 3; j++) {
        for (size_t k = j < 3 ? 3 - j : 0; k < 3; k++)
            b[j] -= spline->factor[j][k] * b[j + k - 3];
        b[j] /= spline->factor[j][3];
    }
}

static void backward(const lm_log_spline *spline, double b[])
{
    for (size_t j = spline->pieces + 3; j-- > 0;) {
        b[j] /= spline->factor[j][3];
        for (size_t k = j < 3 ? 3 - j : 0; k < 3; k++)
            b[j + k - 3] -= spline->factor[j][k] * b[j];
    }
}

enum { STEPS = 200 };

void lm_log_spline_climb(lm_log_spline *spline, const lm_spline_readings *data)
{
    size_t count = spline->pieces + 3;
    double sums[LM_SPLINE_PIECES + 3], mean[LM_SPLINE_PIECES + 3], step[LM_SPLINE_PIECES + 3];
    double from[LM_SPLINE_PIECES + 3], total = data->total + lm_log_spline_spread;
    law at;
    sums_of(spline, data, sums);
    evaluate(spline, data, sums, &at);
    for (int round = 0; round < STEPS; round++) {
        double gain = 0, largest = 0, length;
        expect(spline, &at, mean);
        for (size_t j = 0; j < count; j++)
            step[j] = sums[j] / total - mean[j];
        forward(spline, step, 0);
        for (size_t j = 0; j < count; j++)
            gain += total * step[j] * step[j];
        backward(spline, step);
        if (!(gain > 1e-8)) /* of the log likelihood: nothing that a criterion in units of 1 can see */
            break;
        for (size_t j = 0; j < count; j++)
            largest = fmax(largest, fabs(step[j]));
        memcpy(from, spline->theta, count * sizeof *from);
        double before = at.likelihood;
        for (length = fmin(1, 8 / largest); length > 1e-9; length /= 2) { /* 8: a factor of 3000 in density at once */
            for (size_t j = 0; j < count; j++)
                spline->theta[j] = from[j] + length * step[j];
            evaluate(spline, data, sums, &at);
            if (at.likelihood >= before + 1e-4 * length * gain)
                break;
        }
        if (!(length > 1e-9)) { /* at the rounding of the likelihood */
            memcpy(spline->theta, from, count * sizeof *from);
            evaluate(spline, data, sums, &at);
            break;
        }
    }
    expect(spline, &at, mean);
    spline->log_norm = at.log_norm;
    spline->log_likelihood = at.likelihood;
}

double lm_log_spline_worth(const lm_log_spline *spline, size_t knot, double total)
{
    double jump[LM_SPLINE_PIECES + 3] = {0}, value = 0, variance = 0;
    double before = spline->knot[knot] - spline->knot[knot - 1], after = spline->knot[knot + 1] - spline->knot[knot];
    for (size_t k = 0; k < 4; k++) { /* third derivatives in units of the narrower piece */
        double unit = fmin(before, after);
        jump[knot - 1 + k] -= spline->basis[knot - 1][k][3] * pow(unit / before, 3);
        jump[knot + k] += spline->basis[knot][k][3] * pow(unit / after, 3);
    }
    for (size_t k = 0; k < 5; k++)
        value += jump[knot - 1 + k] * spline->theta[knot - 1 + k];
    forward(spline, jump, knot - 1);
    for (size_t j = knot - 1; j < spline->pieces + 3; j++)
        variance += jump[j] * jump[j];
    return value * value * total / variance;
}
