/* The whole C test harness: check a condition, compare two doubles, report all failures, exit status at the end. */
#ifndef LM_CHECK_H
#define LM_CHECK_H

#include <math.h>
#include <stdio.h>

static int check_failures;

#define CHECK(condition) check_that((condition) != 0, #condition, __FILE__, __LINE__)
#define CHECK_CLOSE(got, wanted, relative) check_close((got), (wanted), (relative), #got, __FILE__, __LINE__)

static inline void check_that(int holds, const char *text, const char *file, int line)
{
    if (!holds) {
        check_failures++;
        fprintf(stderr, "%s:%d: failed: %s\n", file, line, text);
    }
}

static inline void check_close(double got, double wanted, double relative, const char *text, const char *file, int line)
{
    if (!(got == wanted || fabs(got - wanted) <= relative * fabs(wanted))) {
        check_failures++;
        fprintf(stderr, "%s:%d: failed: %s: got %.17g, wanted %.17g, relative error %.3g\n", file, line, text, got,
                wanted, fabs(got - wanted) / fabs(wanted));
    }
}

static inline int check_report(void)
{
    if (check_failures > 0)
        fprintf(stderr, "%d checks failed\n", check_failures);
    return check_failures > 0;
}

#endif
