// Readers of signals and states for those who only look: records, metrics, the caller of a run.
// They change no cell.

#include "run/op_signal.h"

double lw__signal_value(const lw__lane *s, const lw__reference *r)
{
    int W = s->width, L = s->lane;
    switch (r->at.kind) {
    case LW__SIGNAL_CELL:
        return LW__F(r->at.index);
    case LW__SIGNAL_ROW: {
        const lw__group *g = &s->z->groups[r->at.index];
        return row_value(s, g, &g->rows[r->at.part], W, L);
    }
    case LW__SIGNAL_SOURCE:
        return lw__source_value(&s->z->sources[r->at.index].item->def, s->now);
    case LW__SIGNAL_ADC:
        return LW__F(s->z->adcs[r->at.index].value + r->at.part);
    default:
        return r->constant;
    }
}

void lw__group_state(const lw__lane *s, int group, double *x, double *u)
{
    int W = s->width, L = s->lane;
    const lw__group *g = &s->z->groups[group];
    for (int k = 0; g->motion != NULL && k < g->n_x; k++)
        x[k] = g->motion->row(s, g, g->n_rows - g->n_plant_states + k);
    if (g->motion == NULL)
        group_state(s, g, W, L, x, s->work);
    for (int k = 0; k < g->n_u; k++)
        u[k] = LW__F(g->u_now + k);
}
