/* The allocation seam: counts, failure of the nth, and refusal of sizes that overflow. */
#include <stdint.h>

#include "check.h"
#include "limen.h"
#include "numeric/memory.h"

int main(void)
{
    void *block = lm_allocate(3, 8);
    CHECK(block != NULL && lm_memory_live() == 1);
    block = lm_reallocate(block, 5, 8);
    CHECK(block != NULL && lm_memory_live() == 1);
    lm_release(block);
    lm_release(NULL);
    CHECK(lm_memory_live() == 0);
    CHECK(lm_allocate(SIZE_MAX / 2, 4) == NULL);
    lm_memory_fail_at(2);
    void *first = lm_allocate(1, 1);
    CHECK(first != NULL && lm_allocate(1, 1) == NULL);
    lm_release(first);
    for (int s = 0; s < LM_STATUS_END; s++)
        CHECK(lm_status_text((lm_status)s)[0] != '\0');
    CHECK(lm_status_kind(LM_DOMAIN) == LM_KIND_ARGUMENT && lm_status_kind(LM_STATUS_END) == LM_KIND_INTERNAL);
    return check_report();
}
