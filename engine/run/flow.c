// Groups that hold flows: integrated step by step from own event to own event.
//
// Workload: an advance each sample and input change of the group, a step or two each; the flow's
// functions take most of the time.
//
// Invariants
// 1. Only `advance` writes cells. `row` and `look` do the same arithmetic on a copy.
// 2. A step never passes the present tick, which is an own event; its size is carried on.
// 3. Times within an advance count from the anchor, so that they keep their digits in long runs.

#include "run/flow.h"

#include "io/source.h"

#include <latewood/elementary.h>
#include <latewood/quantity.h>

#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>

#define MOST_ROUNDS 1000 // switchings that make one another happen at one instant
#define PART_STATES (LW_PLANT_MAX_STATES + LW_FLOW_MAX_MODES + LW_FLOW_MAX_SWITCHES)

// A moving source in closed form from the anchor on: before + slope t, or before + a sine.
typedef struct course {
    int channel, is_sine;
    double value, slope;       // lines
    double sine, cosine, turn; // sines
} course;

// What the flow of a group is called with.
typedef struct bond {
    const lw__group *g;
    const lw__flow_group *m;
    double begun; // instant of the anchor [s]
    double *u;    // n_u channels
    double *y, *part_u, *part_x;
    double *modes;
    double *sides, *values; // of the switchings of all parts: -1, 1, 0 on neither; scratch
    int n_courses;
    course courses[LW_PLANT_MAX_PORTS];
    const char *failed;    // the part whose function failed
    int chatters, settled; // settled: no side had to change
} bond;

// ---- what the parts give

static void move_sources(bond *b, double t)
{
    for (int k = 0; k < b->n_courses; k++) {
        const course *c = &b->courses[k];
        double v = c->value + c->slope * t;
        if (c->is_sine)
            v += c->sine * lw_cos(c->turn * t) + c->cosine * lw_sin(c->turn * t);
        b->u[c->channel] = v;
    }
}

// A flow's states, modes and sides in one row.
static const double *states_of(bond *b, const lw__flow_part *p, const double *x)
{
    const lw_flow_def *def = p->view.flow;
    if (def == NULL || def->n_modes + def->n_switches == 0)
        return x + p->first_x;
    memcpy(b->part_x, x + p->first_x, sizeof(double) * (size_t)p->view.n_x);
    memcpy(b->part_x + p->view.n_x, b->modes + p->first_mode,
           sizeof(double) * (size_t)def->n_modes);
    memcpy(b->part_x + p->view.n_x + def->n_modes, b->sides + p->first_switch,
           sizeof(double) * (size_t)def->n_switches);
    return b->part_x;
}

// Inputs of a part from channels and from outputs formed so far; NAN where those are to come.
static const double *inputs_of(bond *b, const lw__flow_part *p)
{
    double *u = b->part_u + p->first_u;
    for (int i = 0; i < p->view.n_u; i++) {
        lw__flow_feed f = b->m->feeds[p->first_u + i];
        u[i] = f.kind == LW__FEED_CHANNEL  ? b->u[f.index]
               : f.kind == LW__FEED_OUTPUT ? b->y[f.index]
                                           : 0;
    }
    return u;
}

static double linear_output(const lw_plant_view *v, int output, const double *x, const double *u)
{
    const double *c = v->c + output * v->n_x, *d = v->d + output * v->n_u;
    double y = 0;
    for (int k = 0; k < v->n_x; k++)
        y += c[k] * x[k];
    for (int k = 0; k < v->n_u; k++)
        y += d[k] != 0 ? d[k] * u[k] : 0; // others may be still to come
    return y;
}

static int form_outputs(bond *b, double t, const double *x)
{
    const lw__flow_group *m = b->m;
    for (int k = 0; k < m->n_y; k++)
        b->y[k] = (double)NAN;
    for (int k = 0; k < m->n_steps; k++) {
        const lw__flow_part *p = &m->parts[m->steps[k].part];
        const double *u = inputs_of(b, p);
        int output = m->steps[k].output;
        if (output >= 0) {
            b->y[p->first_y + output] = linear_output(&p->view, output, x + p->first_x, u);
            continue;
        }
        const lw_flow_def *def = p->view.flow;
        if (def->outputs(def->context, b->begun + t, states_of(b, p, x), u, b->y + p->first_y)) {
            b->failed = p->name;
            return 1;
        }
        for (int i = 0; i < p->view.n_y; i++) { // whatever it put there
            int state = b->g->rows[p->first_y + i].state;
            if (state >= 0)
                b->y[p->first_y + i] = x[state];
        }
    }
    return 0;
}

static int part_flow(bond *b, const lw__flow_part *p, double t, const double *x, double *dx)
{
    const lw_plant_view *v = &p->view;
    const double *u = inputs_of(b, p);
    double *out = dx + p->first_x;
    if (v->flow != NULL) {
        if (v->n_x == 0 ||
            !v->flow->flow(v->flow->context, b->begun + t, states_of(b, p, x), u, out))
            return 0;
        b->failed = p->name;
        return 1;
    }
    for (int i = 0; i < v->n_x; i++) {
        double sum = 0;
        for (int k = 0; k < v->n_x; k++)
            sum += v->a[i * v->n_x + k] * x[p->first_x + k];
        for (int k = 0; k < v->n_u; k++)
            sum += v->b[i * v->n_u + k] * u[k];
        out[i] = sum;
    }
    return 0;
}

// ---- the group as a system for the integrator

static int flow_alone(void *context, double t, const double *x, double *dx)
{
    bond *b = context;
    const lw__flow_part *p = b->m->parts;
    const lw_flow_def *def = p->view.flow;
    if (!def->flow(def->context, b->begun + t, states_of(b, p, x), b->u, dx))
        return 0;
    b->failed = p->name;
    return 1;
}

static int flow_of_all(void *context, double t, const double *x, double *dx)
{
    bond *b = context;
    move_sources(b, t);
    if (form_outputs(b, t, x))
        return 1;
    for (int p = 0; p < b->m->n_parts; p++)
        if (part_flow(b, &b->m->parts[p], t, x, dx))
            return 1;
    return 0;
}

static int switches_of_all(void *context, double t, const double *x, double *g)
{
    bond *b = context;
    move_sources(b, t);
    if (!b->m->alone && form_outputs(b, t, x))
        return 1;
    for (int k = 0; k < b->m->n_parts; k++) {
        const lw__flow_part *p = &b->m->parts[k];
        const lw_flow_def *def = p->view.flow;
        if (def == NULL || def->n_switches == 0)
            continue;
        const double *u = inputs_of(b, p);
        if (def->switches(def->context, b->begun + t, states_of(b, p, x), u, g + p->first_switch)) {
            b->failed = p->name;
            return 1;
        }
    }
    return 0;
}

static int jacobian_alone(void *context, double t, const double *x, double *j)
{
    bond *b = context;
    const lw__flow_part *p = b->m->parts;
    const lw_flow_def *def = p->view.flow;
    move_sources(b, t);
    if (!def->jacobian(def->context, b->begun + t, states_of(b, p, x), inputs_of(b, p), j))
        return 0;
    b->failed = p->name;
    return 1;
}

// ---- switchings

static int side_of(double g)
{
    return g > 0 ? 1 : g < 0 ? -1 : 0;
}

// A switching is on its new side: the part it belongs to may jump.
static int call_happened(bond *b, double t, double *x, int which)
{
    const lw__flow_part *p = b->m->parts;
    while (which >= p->first_switch + (p->view.flow != NULL ? p->view.flow->n_switches : 0))
        p++;
    const lw_flow_def *def = p->view.flow;
    if (def->happened == NULL)
        return 0;
    move_sources(b, t);
    if (!b->m->alone && form_outputs(b, t, x))
        return 1;
    double own[PART_STATES];
    memcpy(own, states_of(b, p, x), sizeof own[0] * (size_t)(p->view.n_x + def->n_modes));
    if (def->happened(def->context, b->begun + t, own, inputs_of(b, p), which - p->first_switch,
                      b->sides[which] > 0)) {
        b->failed = p->name;
        return 1;
    }
    memcpy(x + p->first_x, own, sizeof(double) * (size_t)p->view.n_x);
    memcpy(b->modes + p->first_mode, own + p->view.n_x, sizeof(double) * (size_t)def->n_modes);
    return 0;
}

// Sides as they are at (t, x): those that have changed, by a jump of an input or of a state, happen
// one after the other. `border`: one that jumped; at zero it is on neither side.
static int settle(bond *b, double t, double *x, int border)
{
    const lw__flow_group *m = b->m;
    for (int round = 0; round < MOST_ROUNDS; round++) {
        int which = -1;
        if (switches_of_all(b, t, x, b->values))
            return 1;
        for (int k = 0; k < m->n_switches && which < 0; k++) {
            int side = side_of(b->values[k]);
            which = side * b->sides[k] < 0 ? k : -1;
            if (side != 0 || k == border)
                b->sides[k] = side;
        }
        if (which < 0)
            return 0;
        b->settled = 0;
        if (call_happened(b, t, x, which))
            return 1;
        border = which;
    }
    b->chatters = 1;
    return 1;
}

// The integrator has come to where one passes through zero.
static int passed(void *context, double t, double *x, int which, int rising)
{
    bond *b = context;
    double before = b->sides[which];
    b->sides[which] = rising ? 1 : -1;
    if (before == 0 || before == b->sides[which])
        return 0; // it leaves the border, or is known
    int jumps = 0;
    for (int p = 0; p < b->m->n_parts; p++)
        jumps |= b->m->parts[p].view.flow != NULL && b->m->parts[p].view.flow->happened != NULL;
    if (!jumps)
        return 0;
    if (call_happened(b, t, x, which))
        return 1;
    return settle(b, t, x, which);
}

// ---- a bond for one lane

// Take n doubles of scratch.
static double *scratch(double **work, int n)
{
    double *here = *work;
    *work += n;
    return here;
}

static void set_courses(bond *b, lw_tick anchor)
{
    const lw__group *g = b->g;
    b->n_courses = g->n_generators;
    for (int k = 0; k < g->n_generators; k++) {
        const lw__generator *gen = &g->generators[k];
        course *c = &b->courses[k];
        *c = (course){.channel = gen->state, .is_sine = gen->is_sine};
        if (gen->is_sine) {
            c->value = gen->def->before;
            c->turn = lw__source_turn(gen->def);
            lw__source_sine(gen->def, anchor, &c->sine, &c->cosine);
        } else {
            c->value = lw__source_value(gen->def, anchor);
            c->slope = lw__source_slope(gen->def, anchor);
        }
    }
}

// What the group is at its anchor, copied from the cells of the lane.
typedef struct motion_copy {
    bond b;
    lw__ode_system system;
    double *x, *memory, *work;
} motion_copy;

static void open_copy(const lw__lane *s, const lw__group *g, motion_copy *c)
{
    const lw__flow_group *m = g->moves;
    int W = s->width, L = s->lane, n_memory = m->n_memory;
    double *work = s->motion_work;
    bond *b = &c->b;
    *b = (bond){.g = g, .m = m, .begun = lw__seconds(LW__I(g->anchor))};
    b->u = scratch(&work, m->n_u);
    b->y = scratch(&work, m->n_y);
    b->part_u = scratch(&work, m->n_part_u);
    b->part_x = scratch(&work, PART_STATES);
    b->modes = scratch(&work, m->n_modes);
    b->sides = scratch(&work, m->n_switches);
    b->values = scratch(&work, m->n_switches);
    c->x = scratch(&work, m->n_x);
    c->memory = scratch(&work, n_memory);
    c->work = work;
    for (int k = 0; k < m->n_u; k++)
        b->u[k] = LW__F(g->u_now + k);
    for (int k = 0; k < m->n_modes; k++)
        b->modes[k] = LW__F(m->mode_cells + k);
    for (int k = 0; k < m->n_switches; k++)
        b->sides[k] = LW__F(m->side_cells + k);
    for (int k = 0; k < m->n_x; k++)
        c->x[k] = LW__F(g->x + k);
    for (int k = 0; k < n_memory; k++)
        c->memory[k] = LW__F(m->memory + k);
    if (g->n_generators > 0)
        set_courses(b, LW__I(g->anchor));
    c->system = m->system;
    c->system.context = b;
}

static void close_copy(lw__lane *s, const lw__group *g, const motion_copy *c)
{
    const lw__flow_group *m = g->moves;
    int W = s->width, L = s->lane, n_memory = m->n_memory;
    for (int k = 0; k < m->n_modes; k++)
        LW__F(m->mode_cells + k) = c->b.modes[k];
    for (int k = 0; k < m->n_switches; k++)
        LW__F(m->side_cells + k) = c->b.sides[k];
    for (int k = 0; k < m->n_x; k++)
        LW__F(g->x + k) = c->x[k];
    for (int k = 0; k < n_memory; k++)
        LW__F(m->memory + k) = c->memory[k];
    LW__I(g->anchor) = s->now;
}

// ---- stretches

typedef struct giver {
    bond *b;
    lw_tick anchor;
    lw__take_stretch take;
    void *context;
    const lw__ode_piece *piece;
    int has_outputs;  // the outputs at the nodes are formed
    double *at_nodes; // (degree + 1) x n_y
} giver;

static double node(int i)
{
    static const double nodes[LW__FLOW_DEGREE + 1] = {
        0,   0.03806023374435663, 0.14644660940672624, 0.30865828381745508,
        0.5, 0.69134171618254492, 0.85355339059327376, 0.96193976625564337,
        1};
    return nodes[i]; // (1 - cos(i pi / 8)) / 2
}

// Outputs at Chebyshev points of the step.
static int outputs_at_nodes(giver *v)
{
    bond *b = v->b;
    double x[LW_PLANT_MAX_STATES];
    for (int i = 0; i <= LW__FLOW_DEGREE; i++) {
        double t = v->piece->t + node(i) * v->piece->h;
        lw__ode_piece_value(v->piece, node(i), x);
        move_sources(b, t);
        if (form_outputs(b, t, x))
            return 1;
        memcpy(v->at_nodes + i * b->m->n_y, b->y, sizeof(double) * (size_t)b->m->n_y);
    }
    return 0;
}

// Newton's divided differences, then powers of s.
static void interpolate(double *d, double *c)
{
    enum { N = LW__FLOW_DEGREE };
    for (int k = 1; k <= N; k++)
        for (int i = N; i >= k; i--)
            d[i] = (d[i] - d[i - 1]) / (node(i) - node(i - k));
    memset(c, 0, sizeof(double) * (N + 1));
    for (int k = N; k >= 0; k--) {
        for (int i = N - k; i > 0; i--)
            c[i] = c[i - 1] - node(k) * c[i];
        c[0] = d[k] - node(k) * c[0];
    }
}

static int row_of_stretch(const lw__stretch *stretch, int row, double *c)
{
    giver *v = (giver *)(uintptr_t)stretch->context;
    const lw__flow_group *m = v->b->m;
    int state = stretch->group->rows[row].state;
    if (state >= 0)
        return lw__ode_piece_series(v->piece, state, c);
    if (!v->has_outputs && outputs_at_nodes(v))
        for (int i = 0; i <= LW__FLOW_DEGREE * m->n_y; i++)
            v->at_nodes[i] = (double)NAN;
    v->has_outputs = 1;
    double d[LW__FLOW_DEGREE + 1];
    for (int i = 0; i <= LW__FLOW_DEGREE; i++)
        d[i] = v->at_nodes[i * m->n_y + row];
    interpolate(d, c);
    return LW__FLOW_DEGREE;
}

static void give(void *context, const lw__ode_piece *piece)
{
    giver *v = context;
    v->piece = piece;
    v->has_outputs = 0;
    lw__stretch stretch = {.group = v->b->g,
                           .anchor = v->anchor,
                           .begin = piece->t,
                           .end = piece->t + piece->h,
                           .row = row_of_stretch,
                           .context = v};
    v->take(v->context, &stretch);
}

// ---- the motion

typedef struct outcome {
    lw_status status;
    lw_tick at;
    const char *text;
} outcome;

// Of the functions of the parts, or of switchings that make one another happen.
static outcome failure(const motion_copy *c, lw_tick at)
{
    if (c->b.chatters)
        return (outcome){LW_ERR_CHATTER, at, "it switches on and on at one instant"};
    return (outcome){LW_ERR_LAW, at, "a function of the plant failed"};
}

static outcome integrate(const lw__lane *s, motion_copy *c, lw__take_stretch take, void *context)
{
    const lw__flow_group *m = c->b.m;
    int W = s->width, L = s->lane;
    lw_tick anchor = LW__I(c->b.g->anchor);
    giver v = {.b = &c->b, .anchor = anchor, .take = take, .context = context, .at_nodes = c->work};
    double span = lw__seconds(s->now - anchor), failed = 0;
    const char *text = "its flow failed";
    c->b.settled = 1;
    if (m->n_switches > 0 && settle(&c->b, 0, c->x, -1))
        return failure(c, anchor);
    if (!c->b.settled)
        lw__ode_disturb(c->memory);
    lw_status status = lw__ode_advance(&c->system, m->rtol, m->atol, c->memory, 0, span, c->x,
                                       take != NULL ? give : NULL, &v,
                                       c->work + (LW__FLOW_DEGREE + 1) * m->n_y, &failed, &text);
    lw_tick at = anchor + (lw_tick)floor(failed * 1e12);
    return c->b.chatters ? failure(c, at) : (outcome){status, at, text};
}

static const char *name_of(const motion_copy *c)
{
    return c->b.failed != NULL ? c->b.failed : c->b.g->name;
}

static void observe(void *context, const lw__stretch *stretch)
{
    lw__lane *s = context;
    lw__observe(s, stretch, s->now);
}

static void advance(lw__lane *s, const lw__group *g)
{
    int W = s->width, L = s->lane;
    if (LW__I(g->anchor) == s->now || s->status != LW_OK)
        return;
    motion_copy c;
    open_copy(s, g, &c);
    outcome o = integrate(s, &c, g->n_watchers > 0 ? observe : NULL, s);
    if (o.status != LW_OK) {
        lw__end_lane_at(s, o.at, o.status, name_of(&c), o.text);
        return;
    }
    close_copy(s, g, &c);
    if (g->n_watchers > 0)
        lw__observed(s, g, s->now);
}

static void start(lw__lane *s, const lw__group *g)
{
    const lw__flow_group *m = g->moves;
    int W = s->width, L = s->lane;
    for (int k = 0; k < m->n_modes; k++)
        LW__F(m->mode_cells + k) = m->modes[k];
}

static void changed(lw__lane *s, const lw__group *g)
{
    const lw__flow_group *m = g->moves;
    int W = s->width, L = s->lane;
    for (int k = 0; k < m->n_memory; k++) // few: the flow at the anchor is another one now
        s->motion_work[k] = LW__F(m->memory + k);
    lw__ode_disturb(s->motion_work);
    for (int k = 0; k < m->n_memory; k++)
        LW__F(m->memory + k) = s->motion_work[k];
}

static lw_status look(const lw__lane *s, const lw__group *g, lw__take_stretch take_it,
                      void *context, lw_tick *at, const char **text)
{
    motion_copy c;
    open_copy(s, g, &c);
    outcome o = integrate(s, &c, take_it, context);
    *at = o.at;
    *text = o.text;
    return o.status;
}

static double row(const lw__lane *s, const lw__group *g, int number)
{
    int W = s->width, L = s->lane;
    motion_copy c;
    open_copy(s, g, &c);
    lw_tick anchor = LW__I(g->anchor);
    if (anchor != s->now && integrate(s, &c, NULL, NULL).status != LW_OK)
        return (double)NAN;
    int state = g->rows[number].state;
    if (state >= 0)
        return c.x[state];
    double since = lw__seconds(s->now - anchor);
    move_sources(&c.b, since);
    return form_outputs(&c.b, since, c.x) ? (double)NAN : c.b.y[number];
}

// "atol 1e-10", or "atol 1e-10 to 1e-06".
static void tolerance_words(const lw__flow_group *m, char words[64])
{
    double most = 0, least = (double)INFINITY;
    for (int i = 0; i < m->n_x; i++) {
        most = fmax(most, m->atol[i]);
        least = fmin(least, m->atol[i]);
    }
    if (most > least)
        snprintf(words, 64, "atol %.3g to %.3g", least, most);
    else
        snprintf(words, 64, "atol %.3g", most);
}

static void describe(const lw__group *g, void (*say)(void *context, const char *text),
                     void *context)
{
    const lw__flow_group *m = g->moves;
    const char *quote = g->grid_adc >= 0 ? "\"" : "";
    char text[480], words[64];
    tolerance_words(m, words);
    snprintf(text, sizeof text,
             "group of \"%s\": %d plant%s, %d state%s, nonlinear: Dormand-Prince 5(4), Radau IIA "
             "where it is stiff; a step holds its error within atol + rtol |x|, rtol %.3g, %s",
             g->name, m->n_parts, m->n_parts == 1 ? "" : "s", m->n_x, m->n_x == 1 ? "" : "s",
             m->rtol, words);
    say(context, text);
    if (g->grid.den == 1)
        lw_tick_format(g->grid.num, words);
    else
        snprintf(words, sizeof words, "%.9g Hz", 1e12 * (double)g->grid.den / (double)g->grid.num);
    snprintf(text, sizeof text,
             "  it moves at its samples and input changes, and at the instants of %s%s%s%s, every "
             "%s; %d kink%s and event%s located on the way",
             g->grid_adc >= 0 ? "adc " : "", quote, g->grid_of, quote, words, m->n_switches,
             m->n_switches == 1 ? "" : "s", m->n_switches == 1 ? "" : "s");
    say(context, text);
}

const struct lw__motion lw__flow_motion = {.name = "flow",
                                           .tolerance = 1e-7,
                                           .start = start,
                                           .advance = advance,
                                           .changed = changed,
                                           .row = row,
                                           .look = look,
                                           .describe = describe};

int lw__flow_prepare(lw__group *g, lw__flow_group *m)
{
    const lw__flow_part *p = m->parts;
    m->alone = m->n_parts == 1 && g->n_generators == 0 && m->n_u == p->view.n_u && p->view.n_x > 0;
    for (int i = 0; m->alone && i < m->n_u; i++)
        m->alone = m->feeds[i].kind == LW__FEED_CHANNEL && m->feeds[i].index == i;
    int has_jacobian = m->alone && p->view.flow->jacobian != NULL;
    m->system = (lw__ode_system){.n = m->n_x,
                                 .n_switches = m->n_switches,
                                 .flow = m->alone ? flow_alone : flow_of_all,
                                 .switches = switches_of_all,
                                 .jacobian = has_jacobian ? jacobian_alone : NULL,
                                 .happened = passed};
    m->n_memory = lw__ode_memory_size(m->n_x);
    return m->n_u + m->n_y + m->n_part_u + PART_STATES + m->n_modes + 2 * m->n_switches + m->n_x +
           m->n_memory + (LW__FLOW_DEGREE + 1) * m->n_y + lw__ode_work_size(m->n_x, m->n_switches);
}
