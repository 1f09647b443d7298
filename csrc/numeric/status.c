/* The text and the kind of each status, from the one list in limen.h. */
#include "../limen.h"

#define LM_TEXT(code, kind, text) text,
#define LM_KIND(code, kind, text) LM_KIND_##kind,

static const char *const texts[] = {LM_STATUSES(LM_TEXT)};
static const lm_kind kinds[] = {LM_STATUSES(LM_KIND)};

const char *lm_status_text(lm_status status)
{
    return status < LM_STATUS_END ? texts[status] : "unknown status";
}

lm_kind lm_status_kind(lm_status status)
{
    return status < LM_STATUS_END ? kinds[status] : LM_KIND_INTERNAL;
}
