/* The normal law in the log domain. Values made with mpmath at 50 digits; 4e-16 is two roundings of the logarithm. */
#include "check.h"
#include "numeric/logspace.h"
#include "numeric/normal.h"

int main(void)
{
    CHECK_CLOSE(lm_normal_log_sf(2.385), -4.7630457155163706, 4e-16);
    CHECK_CLOSE(lm_normal_log_sf(-2.385), -0.0085762316435017552, 4e-16);
    CHECK_CLOSE(lm_normal_log_sf(40), -804.60844201375379, 4e-16);
    CHECK_CLOSE(lm_normal_log_cdf(-1e4), -50000010.129278915, 4e-16);
    CHECK_CLOSE(lm_normal_log_mass(3, 3 + 1e-9), -26.142204288910716,
                2e-9); /* the width itself rounds: 1e-9 +- 2e-16 */
    CHECK_CLOSE(lm_normal_quantile_log(lm_normal_log_cdf(-1e4)), -1e4, 1e-15);
    CHECK_CLOSE(lm_normal_quantile_log(lm_normal_log_cdf(-30.25)), -30.25, 1e-14);
    CHECK_CLOSE(lm_normal_quantile_log(lm_normal_log_cdf(5.5)), 5.5, 1e-9);
    CHECK(lm_normal_log_mass(1, 1) == -INFINITY && lm_normal_log_sf(INFINITY) == -INFINITY);
    CHECK_CLOSE(lm_log_sub(log(3.0), log(1.0)), log(2.0), 4e-16);
    return check_report();
}
