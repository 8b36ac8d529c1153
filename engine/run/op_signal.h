// Reading a signal at the present tick: the right limit as of the pass. Part of the driver.
#ifndef LATEWOOD_RUN_OP_SIGNAL_H
#define LATEWOOD_RUN_OP_SIGNAL_H

#include "run/op_group.h"

#include <math.h>

LW__INLINE double row_value(const lw__lane *s, const lw__group *g, const lw__row *r, int W, int L)
{
    int at_anchor = LW__I(g->anchor) == s->now;
    if (at_anchor && r->state >= 0)
        return LW__F(g->x + r->state);
    if (g->motion != NULL)
        return g->motion->row(s, g, (int)(r - g->rows));
    double y = 0;
    if (at_anchor) {
        for (int k = 0; k < g->n_x; k++)
            y += r->c[k] * LW__F(g->x + k);
    } else {
        group_state(s, g, W, L, s->work, s->work + g->n_x);
        for (int k = 0; k < g->n_x; k++)
            y += r->c[k] * s->work[k];
    }
    if (r->feeds)
        for (int k = 0; k < g->n_u; k++)
            y += r->d[k] * LW__F(g->u_now + k);
    return y;
}

// A law reads an adc that tells an old or a second reading apart.
static inline double watched_adc(lw__lane *s, const lw__adc *a, int channel, int W, int L)
{
    int64_t reads = LW__I(a->reads + channel);
    LW__I(a->reads + channel) = reads + 1;
    if (s->now - LW__I(a->result) > a->stale_after)
        return a->item->def.stale;
    return reads > 0 && !isnan(a->item->def.reread) ? a->item->def.reread
                                                    : LW__F(a->value + channel);
}

LW__INLINE double read_signal(lw__lane *s, const lw__reference *r, int W, int L)
{
    if (r->at.kind == LW__SIGNAL_CELL)
        return LW__F(r->at.index);
    if (r->at.kind == LW__SIGNAL_CONSTANT)
        return r->constant;
    const lw_frozen *z = s->z;
    if (r->at.kind == LW__SIGNAL_ROW) {
        const lw__group *g = &z->groups[r->at.index];
        return row_value(s, g, &g->rows[r->at.part], W, L);
    }
    if (r->at.kind == LW__SIGNAL_ADC)
        return watched_adc(s, &z->adcs[r->at.index], r->at.part, W, L);
    return lw__source_value(&z->sources[r->at.index].item->def, s->now);
}

#endif
