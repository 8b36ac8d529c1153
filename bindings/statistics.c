// lw.statistics. See statistics.h.

#include "statistics.h"

#include "box.h"
#include "module.h"

#include <lauxlib.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#define SAMPLE "latewood.sample"

lw__lua_sample *lw__lua_sample_new(lua_State *L)
{
    lw__lua_sample *s = lua_newuserdatauv(L, sizeof *s, 0);
    memset(s, 0, sizeof *s);
    luaL_setmetatable(L, SAMPLE);
    return s;
}

int lw__lua_sample_add(lw__lua_sample *s, int64_t run, double value)
{
    if (s->n == s->room) {
        int64_t more = s->room > 0 ? 2 * s->room : 1024;
        int64_t *runs = realloc(s->run, sizeof *runs * (size_t)more);
        s->run = runs != NULL ? runs : s->run;
        double *values = realloc(s->value, sizeof *values * (size_t)more);
        s->value = values != NULL ? values : s->value;
        if (runs == NULL || values == NULL)
            return s->failed = 1;
        s->room = more;
    }
    s->run[s->n] = run;
    s->value[s->n++] = value;
    s->n_undefined += isnan(value);
    return 0;
}

static lw__lua_sample *self(lua_State *L)
{
    return luaL_checkudata(L, 1, SAMPLE);
}

static int release(lua_State *L)
{
    lw__lua_sample *s = self(L);
    free(s->run);
    free(s->value);
    free(s->sorted);
    memset(s, 0, sizeof *s);
    return 0;
}

lw_side lw__lua_side(lua_State *L, int index)
{
    static const char *const names[] = {"both", "lower", "upper", NULL};
    return (lw_side)luaL_checkoption(L, index, "both", names);
}

static lw_moments moments_of(const lw__lua_sample *s)
{
    lw_moments m = lw_moments_none();
    for (int64_t k = 0; k < s->n; k++)
        if (!isnan(s->value[k]))
            lw_moments_add(&m, s->value[k]);
    return m;
}

static int raise(lua_State *L, const lw_error *err)
{
    return lw__lua_fail(L, "%s", err->text);
}

static int sample_n(lua_State *L)
{
    lua_pushinteger(L, self(L)->n);
    return 1;
}

static int sample_undefined(lua_State *L)
{
    lua_pushinteger(L, self(L)->n_undefined);
    return 1;
}

static int sample_mean(lua_State *L)
{
    lw_moments m = moments_of(self(L));
    lua_pushnumber(L, lw_moments_mean(&m));
    return 1;
}

static int sample_deviation(lua_State *L)
{
    lw_moments m = moments_of(self(L));
    lua_pushnumber(L, lw_moments_deviation(&m));
    return 1;
}

// The first run with the extreme value; nothing where no value is defined.
static int extreme(lua_State *L, double sign)
{
    const lw__lua_sample *s = self(L);
    int64_t at = -1;
    for (int64_t k = 0; k < s->n; k++)
        if (!isnan(s->value[k]) && (at < 0 || sign * s->value[k] > sign * s->value[at]))
            at = k;
    if (at < 0)
        return 0;
    lua_pushnumber(L, s->value[at]);
    lua_pushinteger(L, s->run[at]);
    return 2;
}

static int sample_lowest(lua_State *L)
{
    return extreme(L, -1);
}

static int sample_highest(lua_State *L)
{
    return extreme(L, 1);
}

static int push_interval(lua_State *L, lw_interval r)
{
    lua_pushnumber(L, r.lo);
    lua_pushnumber(L, r.hi);
    return 2;
}

static int sample_mean_interval(lua_State *L)
{
    lw_error err;
    lw_interval r;
    lw_moments m = moments_of(self(L));
    if (lw_mean_interval(&m, luaL_checknumber(L, 2), lw__lua_side(L, 3), &r, &err) != LW_OK)
        return raise(L, &err);
    return push_interval(L, r);
}

static int by_value(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

// Defined values in rising order; their number.
static int64_t sort(lua_State *L, lw__lua_sample *s)
{
    int64_t n = s->n - s->n_undefined, at = 0;
    if (s->sorted != NULL || n == 0)
        return n;
    s->sorted = malloc(sizeof *s->sorted * (size_t)n);
    if (s->sorted == NULL)
        luaL_error(L, "no memory to sort %d values", (int)n);
    for (int64_t k = 0; k < s->n; k++)
        if (!isnan(s->value[k]))
            s->sorted[at++] = s->value[k];
    qsort(s->sorted, (size_t)n, sizeof *s->sorted, by_value);
    return n;
}

static int sample_quantile(lua_State *L)
{
    lw__lua_sample *s = self(L);
    int64_t n = sort(L, s);
    lua_pushnumber(L, lw_sorted_quantile(n, s->sorted, luaL_checknumber(L, 2)));
    return 1;
}

static int sample_quantile_interval(lua_State *L)
{
    lw_error err;
    int64_t lo, hi;
    lw__lua_sample *s = self(L);
    int64_t n = sort(L, s);
    if (lw_quantile_ranks(n, luaL_checknumber(L, 2), luaL_checknumber(L, 3), lw__lua_side(L, 4),
                          &lo, &hi, &err) != LW_OK)
        return raise(L, &err);
    return push_interval(L, (lw_interval){lo < 1 ? -(double)INFINITY : s->sorted[lo - 1],
                                          hi > n ? (double)INFINITY : s->sorted[hi - 1]});
}

// Differences run by run, where both have the run.
static int sample_minus(lua_State *L)
{
    const lw__lua_sample *a = self(L), *b = luaL_checkudata(L, 2, SAMPLE);
    lw__lua_sample *d = lw__lua_sample_new(L);
    for (int64_t i = 0, j = 0; i < a->n && j < b->n;) {
        if (a->run[i] == b->run[j]) {
            if (lw__lua_sample_add(d, a->run[i], a->value[i] - b->value[j]))
                return luaL_error(L, "no memory for a sample");
            i++;
            j++;
        } else if (a->run[i] < b->run[j]) {
            i++;
        } else {
            j++;
        }
    }
    return 1;
}

// at(k): run and value, k from 1.
static int sample_at(lua_State *L)
{
    const lw__lua_sample *s = self(L);
    lua_Integer k = luaL_checkinteger(L, 2);
    luaL_argcheck(L, k >= 1 && k <= s->n, 2, "beyond the sample");
    lua_pushinteger(L, s->run[k - 1]);
    lua_pushnumber(L, s->value[k - 1]);
    return 2;
}

// ---- functions

int lw__lua_statistics_proportion(lua_State *L)
{
    lw_error err;
    lw_interval r = {0, 1};
    lw_status status = lw_proportion_exact(luaL_checkinteger(L, 1), luaL_checkinteger(L, 2),
                                           luaL_checknumber(L, 3), lw__lua_side(L, 4), &r, &err);
    return status == LW_OK ? push_interval(L, r) : raise(L, &err);
}

int lw__lua_statistics_rate(lua_State *L)
{
    lw_error err;
    lw_interval r = {0, 0};
    lw_status status = lw_rate_exact(luaL_checkinteger(L, 1), luaL_checknumber(L, 2),
                                     luaL_checknumber(L, 3), lw__lua_side(L, 4), &r, &err);
    return status == LW_OK ? push_interval(L, r) : raise(L, &err);
}

int lw__lua_statistics_tolerance_runs(lua_State *L)
{
    lw_error err;
    int64_t n;
    if (lw_tolerance_runs(luaL_checknumber(L, 1), luaL_checknumber(L, 2), luaL_optinteger(L, 3, 1),
                          &n, &err) != LW_OK)
        return raise(L, &err);
    lua_pushinteger(L, n);
    return 1;
}

// sample(list): the values of runs 0, 1, ...
int lw__lua_statistics_sample(lua_State *L)
{
    luaL_checktype(L, 1, LUA_TTABLE);
    lw__lua_sample *s = lw__lua_sample_new(L);
    lua_Integer n = (lua_Integer)lua_rawlen(L, 1);
    for (lua_Integer k = 1; k <= n; k++) {
        if (lua_rawgeti(L, 1, k) != LUA_TNUMBER)
            return lw__lua_fail(L, "sample: entry %d is a %s; a number is wanted", (int)k,
                                luaL_typename(L, -1));
        if (lw__lua_sample_add(s, k - 1, lua_tonumber(L, -1)))
            return lw__lua_fail(L, "no memory for a sample");
        lua_pop(L, 1);
    }
    return 1;
}

void lw__lua_sample_class(lua_State *L)
{
    static const luaL_Reg methods[] = {{"n", sample_n},
                                       {"undefined", sample_undefined},
                                       {"mean", sample_mean},
                                       {"deviation", sample_deviation},
                                       {"lowest", sample_lowest},
                                       {"highest", sample_highest},
                                       {"mean_interval", sample_mean_interval},
                                       {"quantile", sample_quantile},
                                       {"quantile_interval", sample_quantile_interval},
                                       {"minus", sample_minus},
                                       {"at", sample_at},
                                       {NULL, NULL}};
    if (luaL_newmetatable(L, SAMPLE)) {
        lua_pushcfunction(L, release);
        lua_setfield(L, -2, "__gc");
        luaL_newlib(L, methods);
        lua_setfield(L, -2, "__index");
    }
    lua_pop(L, 1);
}
