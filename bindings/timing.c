// Random and replayed durations: constructors, arithmetic, and what analysis asks of them.

#include "fields.h"
#include "file.h"
#include "module.h"

#include <latewood/draw.h>
#include <latewood/quantity.h>
#include <math.h>
#include <stdint.h>

#define DESCRIPTION_BYTES 1024

// ---- shared

static lw__lua_timing *new_timing(lua_State *L)
{
    return lw__lua_new(L, LW__LUA_TIMING, sizeof(lw__lua_timing), 0);
}

static int made(const lw__lua_reader *r, lw_status status, const lw_error *err)
{
    if (status != LW_OK)
        lw__lua_bad(r, "%s", lua_pushstring(r->L, err->text));
    return 1;
}

static const lw_timing *open_box(const lw__lua_reader *r, const char *field, lw__lua_timing *box)
{
    if (box->it == NULL)
        lw__lua_bad(r, "%s is a timing that is closed", field);
    return box->it;
}

const lw_timing *lw__lua_timing_at(const lw__lua_reader *r, const char *field, int index)
{
    lua_State *L = r->L;
    lw_error err = {LW_OK, ""};
    lw__lua_timing *box = luaL_testudata(L, index, LW__LUA_TIMING);
    if (box != NULL)
        return open_box(r, field, box);
    int type = lua_type(L, index);
    if (type != LUA_TNUMBER && type != LUA_TSTRING)
        lw__lua_bad_type(r, field, index, "a timing or a time");
    double seconds = lw__lua_number(r, field, index, "s");
    box = new_timing(L);
    if (lw_timing_constant(seconds, &box->it, &err) != LW_OK)
        lw__lua_bad_field(r, field, &err);
    return box->it;
}

// ---- families with arguments in order

int lw__lua_timing_constant(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing constant", 1);
    double value = lw__lua_number(&r, "the time", 1, "s");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_constant(value, &box->it, &err), &err);
}

int lw__lua_timing_uniform(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing uniform", 2);
    double lo = lw__lua_number(&r, "lo", 1, "s");
    double hi = lw__lua_number(&r, "hi", 2, "s");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_uniform(lo, hi, &box->it, &err), &err);
}

int lw__lua_timing_triangular(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing triangular", 3);
    double lo = lw__lua_number(&r, "lo", 1, "s");
    double mode = lw__lua_number(&r, "mode", 2, "s");
    double hi = lw__lua_number(&r, "hi", 3, "s");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_triangular(lo, mode, hi, &box->it, &err), &err);
}

// ---- families with fields

typedef struct family {
    double mean, deviation, lo, hi, median, sigma, shift, location, scale;
} family;

static const lw__lua_field normal_fields[] = {
    REQUIRED(family, mean, "mean", FIELD_NUMBER, "s"),
    REQUIRED(family, deviation, "deviation", FIELD_NUMBER, "s"),
    OPTIONAL(family, lo, "lo", FIELD_NUMBER, "s"), OPTIONAL(family, hi, "hi", FIELD_NUMBER, "s")};
static const lw__lua_field log_normal_fields[] = {
    REQUIRED(family, median, "median", FIELD_NUMBER, "s"),
    REQUIRED(family, sigma, "sigma", FIELD_NUMBER, "1"),
    OPTIONAL(family, shift, "shift", FIELD_NUMBER, "s"),
    OPTIONAL(family, hi, "hi", FIELD_NUMBER, "s")};
static const lw__lua_field exponential_fields[] = {
    REQUIRED(family, mean, "mean", FIELD_NUMBER, "s"),
    OPTIONAL(family, shift, "shift", FIELD_NUMBER, "s"),
    OPTIONAL(family, hi, "hi", FIELD_NUMBER, "s")};
static const lw__lua_field gumbel_fields[] = {
    REQUIRED(family, location, "location", FIELD_NUMBER, "s"),
    REQUIRED(family, scale, "scale", FIELD_NUMBER, "s"),
    OPTIONAL(family, lo, "lo", FIELD_NUMBER, "s"), OPTIONAL(family, hi, "hi", FIELD_NUMBER, "s")};

static lw_status make_normal(const family *f, lw_timing **out, lw_error *err)
{
    return lw_timing_normal(f->mean, f->deviation, f->lo, f->hi, out, err);
}

static lw_status make_log_normal(const family *f, lw_timing **out, lw_error *err)
{
    return lw_timing_log_normal(f->median, f->sigma, f->shift, f->hi, out, err);
}

static lw_status make_exponential(const family *f, lw_timing **out, lw_error *err)
{
    return lw_timing_exponential(f->shift, f->mean, f->hi, out, err);
}

static lw_status make_gumbel(const family *f, lw_timing **out, lw_error *err)
{
    return lw_timing_gumbel(f->location, f->scale, f->lo, f->hi, out, err);
}

#define FAMILY(name)                                                                               \
    int lw__lua_timing_##name(lua_State *L)                                                        \
    {                                                                                              \
        lw_error err = {LW_OK, ""};                                                                \
        family f = {.lo = (double)NAN, .hi = (double)NAN};                                         \
        lw__lua_reader r = lw__lua_read(L, 1, "timing " #name);                                    \
        LW__LUA_FIELDS(&r, name##_fields, 0, &f);                                                  \
        lw__lua_timing *box = new_timing(L);                                                       \
        return made(&r, make_##name(&f, &box->it, &err), &err);                                    \
    }
FAMILY(normal)
FAMILY(log_normal)
FAMILY(exponential)
FAMILY(gumbel)

// ---- lists

typedef struct lists {
    lw__lua_list values, weights, edges;
    const char *file, *unit;
    int random_start;
} lists;

static const lw__lua_field discrete_fields[] = {
    REQUIRED(lists, values, "values", FIELD_LIST, "s"),
    OPTIONAL(lists, weights, "weights", FIELD_LIST, "1")};

int lw__lua_timing_discrete(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lists p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "timing discrete");
    LW__LUA_FIELDS(&r, discrete_fields, 0, &p);
    if (p.weights.v != NULL && p.weights.n != p.values.n)
        lw__lua_bad(&r, "weights has %d numbers, values %d; one length is wanted", p.weights.n,
                    p.values.n);
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_discrete(p.values.n, p.values.v, p.weights.v, &box->it, &err), &err);
}

static const lw__lua_field histogram_fields[] = {
    REQUIRED(lists, edges, "edges", FIELD_LIST, "s"),
    REQUIRED(lists, weights, "weights", FIELD_LIST, "1")};

int lw__lua_timing_histogram(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lists p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "timing histogram");
    LW__LUA_FIELDS(&r, histogram_fields, 0, &p);
    if (p.edges.n != p.weights.n + 1)
        lw__lua_bad(&r, "edges has %d numbers, weights %d; one edge more than weights is wanted",
                    p.edges.n, p.weights.n);
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_histogram(p.weights.n, p.edges.v, p.weights.v, &box->it, &err), &err);
}

static const char *const starts[] = {"first", "random", NULL};
static const lw__lua_field replay_fields[] = {OPTIONAL(lists, values, "values", FIELD_LIST, "s"),
                                              OPTIONAL(lists, file, "file", FIELD_TEXT, NULL),
                                              OPTIONAL(lists, unit, "unit", FIELD_TEXT, NULL),
                                              CHOICE(lists, random_start, "start", starts)};

// What one of `unit` is in seconds.
static double scale_of(const lw__lua_reader *r, const char *unit)
{
    lw_error err = {LW_OK, ""};
    double scale = 1;
    if (unit != NULL &&
        lw_quantity_parse_as(lua_pushfstring(r->L, "1 %s", unit), "s", &scale, &err) != LW_OK)
        lw__lua_bad_field(r, "unit", &err);
    return scale;
}

int lw__lua_timing_replay(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lists p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "timing replay");
    LW__LUA_FIELDS(&r, replay_fields, 0, &p);
    if ((p.values.v != NULL) == (p.file != NULL))
        lw__lua_bad(&r, "either values or file is wanted");
    if (p.file == NULL && p.unit != NULL)
        lw__lua_bad(&r, "unit is for a file; values have their own");
    double scale = scale_of(&r, p.unit);
    const char *path = p.file != NULL ? lw__lua_resolve(&r, "file", p.file) : NULL;
    lw__lua_timing *box = new_timing(L);
    if (path == NULL)
        return made(&r, lw_timing_replay(p.values.n, p.values.v, p.random_start, &box->it, &err),
                    &err);
    return made(&r, lw_timing_replay_file(path, scale, p.random_start, &box->it, &err), &err);
}

// ---- timings of timings

typedef struct mixture {
    double enter, leave, chance;
    int64_t every;
} mixture;

static const lw__lua_field modes_fields[] = {OTHER("quiet"), OTHER("burst"),
                                             REQUIRED(mixture, enter, "enter", FIELD_NUMBER, "1"),
                                             REQUIRED(mixture, leave, "leave", FIELD_NUMBER, "1")};

static const lw_timing *timing_field(const lw__lua_reader *r, const char *field)
{
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        lw__lua_bad(r, "%s is missing", field);
    return lw__lua_timing_at(r, field, lua_gettop(r->L));
}

int lw__lua_timing_modes(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    mixture p = {0};
    lw__lua_reader r = lw__lua_read(L, 1, "timing modes");
    LW__LUA_FIELDS(&r, modes_fields, 0, &p);
    const lw_timing *quiet = timing_field(&r, "quiet");
    const lw_timing *burst = timing_field(&r, "burst");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_modes(quiet, burst, p.enter, p.leave, &box->it, &err), &err);
}

static const lw__lua_field stall_fields[] = {
    OTHER("usual"), OTHER("stall"), OPTIONAL(mixture, chance, "chance", FIELD_NUMBER, "1"),
    OPTIONAL(mixture, every, "every", FIELD_LONG, NULL), OTHER("phase")};

// Jobs from the start to the first stall; -1 for one draw a run.
static int64_t stall_phase(const lw__lua_reader *r)
{
    if (lw__lua_push_field(r, "phase") == LUA_TNIL)
        return 0;
    if (lua_type(r->L, -1) != LUA_TSTRING)
        return lw__lua_whole(r, "phase", -1, 0, INT64_MAX);
    lua_pushliteral(r->L, "random");
    if (!lua_rawequal(r->L, -1, -2))
        lw__lua_bad_type(r, "phase", -2, "a job number or \"random\"");
    return -1;
}

int lw__lua_timing_stall(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    mixture p = {.chance = (double)NAN};
    lw__lua_reader r = lw__lua_read(L, 1, "timing stall");
    LW__LUA_FIELDS(&r, stall_fields, 0, &p);
    if ((p.every > 0) == !isnan(p.chance))
        lw__lua_bad(&r, "either chance or every (jobs, from 1 on) is wanted");
    int64_t phase = stall_phase(&r);
    const lw_timing *usual = timing_field(&r, "usual");
    const lw_timing *stall = timing_field(&r, "stall");
    double chance = p.every > 0 ? 0 : p.chance;
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_stall(usual, stall, chance, p.every, phase, &box->it, &err), &err);
}

int lw__lua_timing_maximum(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing maximum", 2);
    const lw_timing *a = lw__lua_timing_at(&r, "argument 1", 1);
    const lw_timing *b = lw__lua_timing_at(&r, "argument 2", 2);
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_maximum(a, b, &box->it, &err), &err);
}

// ---- operators

// timing + timing, timing + time, time + timing
int lw__lua_timing_add(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing +", 2);
    int a_is = luaL_testudata(L, 1, LW__LUA_TIMING) != NULL;
    int b_is = luaL_testudata(L, 2, LW__LUA_TIMING) != NULL;
    const lw_timing *a = lw__lua_timing_at(&r, "the left side", a_is ? 1 : 2);
    if (a_is && b_is) {
        const lw_timing *b = lw__lua_timing_at(&r, "the right side", 2);
        lw__lua_timing *sum = new_timing(L);
        return made(&r, lw_timing_sum(a, b, &sum->it, &err), &err);
    }
    double shift = lw__lua_number(&r, "what is added", a_is ? 2 : 1, "s");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_affine(a, 1, shift, &box->it, &err), &err);
}

int lw__lua_timing_multiply(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw__lua_reader r = lw__lua_arguments(L, "timing *", 2);
    int a_is = luaL_testudata(L, 1, LW__LUA_TIMING) != NULL;
    const lw_timing *t = lw__lua_timing_at(&r, "a side", a_is ? 1 : 2);
    double factor = lw__lua_number(&r, "the factor", a_is ? 2 : 1, "1");
    lw__lua_timing *box = new_timing(L);
    return made(&r, lw_timing_affine(t, factor, 0, &box->it, &err), &err);
}

// ---- what analysis asks

static const lw_timing *self(lua_State *L)
{
    lw__lua_timing *box = luaL_checkudata(L, 1, LW__LUA_TIMING);
    if (box->it == NULL)
        lw__lua_fail(L, "the timing is closed");
    return box->it;
}

int lw__lua_timing_support(lua_State *L)
{
    double lo = 0, hi = 0;
    lw_timing_support(self(L), &lo, &hi);
    lua_pushnumber(L, lo);
    lua_pushnumber(L, hi);
    return 2;
}

int lw__lua_timing_cdf(lua_State *L)
{
    const lw_timing *t = self(L);
    lw__lua_reader r = lw__lua_arguments(L, "timing cdf", 2);
    lua_pushnumber(L, lw_timing_cdf(t, lw__lua_number(&r, "the time", 2, "s")));
    return 1;
}

int lw__lua_timing_density(lua_State *L)
{
    const lw_timing *t = self(L);
    lw__lua_reader r = lw__lua_arguments(L, "timing density", 2);
    lua_pushnumber(L, lw_timing_density(t, lw__lua_number(&r, "the time", 2, "s")));
    return 1;
}

// One number in (0, 1) for each uniform that a draw of the timing takes.
int lw__lua_timing_quantile(lua_State *L)
{
    const lw_timing *t = self(L);
    int n = lw_timing_n_streams(t), given = lua_gettop(L) - 1;
    lw__lua_reader r = lw__lua_arguments(L, "timing quantile", n + 1);
    if (lw_timing_n_state(t) > 0)
        lw__lua_bad(&r, "the timing has a memory; only draw gives its values");
    if (given != n)
        lw__lua_bad(&r, "%d numbers given; a draw of this timing takes %d", given, n);
    double *u = lw__lua_room(L, (size_t)n, sizeof *u);
    for (int i = 0; i < n; i++) {
        u[i] = lw__lua_number(&r, "the share", i + 2, "1");
        if (!(u[i] > 0 && u[i] < 1))
            lw__lua_bad_type(&r, "the share", i + 2, "a number between 0 and 1");
    }
    lua_pushnumber(L, lw_timing_quantile(t, u));
    return 1;
}

int lw__lua_timing_median(lua_State *L)
{
    lua_pushnumber(L, lw_timing_median(self(L)));
    return 1;
}

int lw__lua_timing_moment(lua_State *L)
{
    const lw_timing *t = self(L);
    lw__lua_reader r = lw__lua_arguments(L, "timing moment", 2);
    int order = (int)lw__lua_whole(&r, "the order", 2, 1, 4);
    lua_pushnumber(L, lw_timing_moment(t, order));
    return 1;
}

int lw__lua_timing_nodes(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    const lw_timing *t = self(L);
    lw__lua_reader r = lw__lua_arguments(L, "timing nodes", 2);
    int n = (int)lw__lua_whole(&r, "the number of nodes", 2, 1, 10000);
    double *x = lw__lua_room(L, (size_t)n, sizeof *x);
    double *weight = lw__lua_room(L, (size_t)n, sizeof *weight);
    made(&r, lw_timing_nodes(t, n, x, weight, &err), &err);
    lw__lua_push_numbers(L, n, x);
    lw__lua_push_numbers(L, n, weight);
    return 2;
}

// The draw of job `job`: timings with a memory are taken through every job before it.
int lw__lua_timing_draw(lua_State *L)
{
    const lw_timing *t = self(L);
    lw__lua_reader r = lw__lua_arguments(L, "timing draw", 5);
    uint64_t seed = (uint64_t)lw__lua_whole(&r, "seed", 2, 0, INT64_MAX);
    uint64_t run = (uint64_t)lw__lua_whole(&r, "run", 3, 0, INT64_MAX);
    uint32_t job = (uint32_t)lw__lua_whole(&r, "job", 4, 0, UINT32_MAX);
    const char *name = lw__lua_field_text(&r, "name", 5);
    int n = lw_timing_n_streams(t), n_state = lw_timing_n_state(t);
    uint32_t *streams = lw__lua_room(L, (size_t)n, sizeof *streams);
    double *state = lw__lua_room(L, (size_t)n_state, sizeof *state);
    int top = lua_gettop(L);
    for (int i = 0; i < n; i++) {
        streams[i] = lw_stream(i == 0 ? name : lua_pushfstring(L, "%s#%d", name, i));
        lua_settop(L, top);
    }
    double value = 0;
    for (uint32_t k = n_state > 0 ? 0 : job;; k++) {
        value = lw_timing_draw(t, seed, run, k, streams, state);
        if (k == job)
            break;
    }
    lua_pushnumber(L, value);
    return 1;
}

int lw__lua_timing_describe(lua_State *L)
{
    char text[DESCRIPTION_BYTES];
    lw_timing_describe(self(L), text, (int)sizeof text);
    lua_pushstring(L, text);
    return 1;
}

int lw__lua_timing_close(lua_State *L)
{
    lw__lua_timing *box = luaL_checkudata(L, 1, LW__LUA_TIMING);
    lw_timing_free(box->it);
    box->it = NULL;
    return 0;
}
