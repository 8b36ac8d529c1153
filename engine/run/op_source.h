// Operation of sources: the next change. Part of the driver.
#ifndef LATEWOOD_RUN_OP_SOURCE_H
#define LATEWOOD_RUN_OP_SOURCE_H

#include "run/op_group.h"

#include <math.h>

LW__INLINE void op_source(LW__CONTEXT, const lw__source *src)
{
    const lw_source_def *def = &src->item->def;
    int64_t k = LW__I(src->count);
    int failed = 0;
    double value = src->moving ? lw__source_value(def, s->now)
                               : lw__source_after(def, k, s->seed, s->run, src->stream, &failed);
    if (failed)
        lw__end_lane(s, LW_ERR_LAW, def->name, "its function failed");
    else if (!isfinite(value))
        lw__end_lane(s, LW_ERR_NOT_FINITE, def->name, "its value is not finite");
    LW__F(src->held) = value;
    LW__I(src->count) = k + 1;
    LW__I(s->z->due + src->timer) = lw__source_change(def, k + 1);
    lw__tell(p, &src->observers, N);
    if (!src->moving && s->status == LW_OK)
        drive(LW__HERE, &src->drives, value);
}

#endif
