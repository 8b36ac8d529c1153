// Sources in time: each constructor makes a definition that rig:source names and adds.
//
// A source is a definition with the numbers of a table, or a Lua function, behind it; both are
// user values of its userdata.

#include "source.h"
#include "call.h"
#include "fields.h"
#include "file.h"
#include "module.h"

#include <math.h>
#include <string.h>

static lw__lua_source *new_source(lua_State *L, const lw_source_def *def)
{
    lw__lua_source *box = lw__lua_new(L, LW__LUA_SOURCE, sizeof *box, SOURCE_USER_VALUES);
    box->def = *def;
    return box;
}

// Read `fields` into a definition of `kind` that is already filled with defaults.
static int from_fields(lua_State *L, const char *what, int n, const lw__lua_field *fields,
                       lw_source_def *def)
{
    lw__lua_reader r = lw__lua_read(L, 1, what);
    lw__lua_fields(&r, n, fields, 0, 0, NULL, def);
    new_source(L, def);
    return 1;
}

#define FROM_FIELDS(L, what, fields, def)                                                          \
    from_fields(L, what, (int)(sizeof(fields) / sizeof *(fields)), fields, def)
#define NUMBER(member, name, unit) OPTIONAL(lw_source_def, member, name, FIELD_NUMBER, unit)
#define STATED(member, name, unit) REQUIRED(lw_source_def, member, name, FIELD_NUMBER, unit)
#define AT NUMBER(at, "at", "s")

int lw__lua_source_constant(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_CONSTANT);
    lw__lua_reader r = lw__lua_arguments(L, "source constant", 1);
    def.level = lw__lua_number(&r, "the value", 1, NULL);
    new_source(L, &def);
    return 1;
}

static const lw__lua_field step_fields[] = {AT, NUMBER(before, "from", NULL),
                                            STATED(level, "to", NULL)};

int lw__lua_source_step(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_STEP);
    return FROM_FIELDS(L, "source step", step_fields, &def);
}

static const lw__lua_field ramp_fields[] = {
    AT, STATED(slope, "slope", NULL), NUMBER(before, "from", NULL), NUMBER(level, "to", NULL)};

int lw__lua_source_ramp(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_RAMP);
    def.level = (double)NAN;
    return FROM_FIELDS(L, "source ramp", ramp_fields, &def);
}

static const lw__lua_field sine_fields[] = {
    AT, STATED(level, "amplitude", NULL), STATED(frequency, "frequency", "Hz"),
    NUMBER(phase, "phase", "1"), NUMBER(before, "offset", NULL)};

int lw__lua_source_sine(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_SINE);
    return FROM_FIELDS(L, "source sine", sine_fields, &def);
}

static const lw__lua_field chirp_fields[] = {
    AT,
    STATED(level, "amplitude", NULL),
    STATED(frequency, "from", "Hz"),
    STATED(frequency_end, "to", "Hz"),
    STATED(sweep, "over", "s"),
    REQUIRED(lw_source_def, every, "every", FIELD_PERIOD, NULL),
    NUMBER(before, "offset", NULL)};

int lw__lua_source_chirp(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_CHIRP);
    return FROM_FIELDS(L, "source chirp", chirp_fields, &def);
}

static const lw__lua_field pulses_fields[] = {
    AT, NUMBER(before, "low", NULL), STATED(level, "high", NULL), STATED(width, "width", "s"),
    REQUIRED(lw_source_def, period, "every", FIELD_PERIOD, NULL)};

int lw__lua_source_pulses(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_PULSES);
    return FROM_FIELDS(L, "source pulses", pulses_fields, &def);
}

// ---- noise

typedef struct noise {
    double deviation, spread, mean;
    lw_period every;
} noise;

static const lw__lua_field noise_fields[] = {
    OPTIONAL(noise, deviation, "deviation", FIELD_NUMBER, NULL),
    OPTIONAL(noise, spread, "spread", FIELD_NUMBER, NULL),
    OPTIONAL(noise, mean, "mean", FIELD_NUMBER, NULL),
    REQUIRED(noise, every, "every", FIELD_PERIOD, NULL)};

int lw__lua_source_noise(lua_State *L)
{
    noise p = {.deviation = (double)NAN, .spread = (double)NAN};
    lw__lua_reader r = lw__lua_read(L, 1, "source noise");
    LW__LUA_FIELDS(&r, noise_fields, 0, &p);
    if (isnan(p.deviation) == isnan(p.spread))
        lw__lua_bad(&r, "either deviation (normal) or spread (uniform) is wanted");
    lw_source_def def = lw_source_default(LW_SOURCE_NOISE);
    def.uniform = !isnan(p.spread);
    def.level = def.uniform ? p.spread : p.deviation;
    def.before = p.mean;
    def.every = p.every;
    new_source(L, &def);
    return 1;
}

// ---- tables

typedef struct points {
    const char *file;
    int lines;
} points;

static const char *const betweens[] = {"hold", "lines", NULL};
static const lw__lua_field table_fields[] = {OTHER("time"), OTHER("value"),
                                             OPTIONAL(points, file, "file", FIELD_TEXT, NULL),
                                             CHOICE(points, lines, "between", betweens)};

static lw__lua_list list_field(const lw__lua_reader *r, const char *field, const char *unit)
{
    if (lw__lua_push_field(r, field) == LUA_TNIL)
        lw__lua_bad(r, "%s is missing", field);
    return lw__lua_numbers(r, field, -1, unit);
}

// The numbers of both columns, owned by one userdata on top of the stack.
static double *join(lua_State *L, const lw__lua_list columns[2])
{
    size_t n = (size_t)columns[0].n;
    double *v = lw__lua_room(L, 2 * n, sizeof *v);
    memcpy(v, columns[0].v, n * sizeof *v);
    memcpy(v + n, columns[1].v, n * sizeof *v);
    return v;
}

int lw__lua_source_table(lua_State *L)
{
    points p = {0};
    lw__lua_list columns[2];
    lw__lua_reader r = lw__lua_read(L, 1, "source table");
    LW__LUA_FIELDS(&r, table_fields, 0, &p);
    if (p.file != NULL) {
        lw__lua_column wanted[2] = {lw__lua_column_field(&r, "time"),
                                    lw__lua_column_field(&r, "value")};
        static const lw__lua_format usual = {'.', 0, 0};
        lw__lua_read_columns(&r, lw__lua_resolve(&r, "file", p.file), wanted, &usual, columns);
    } else {
        columns[0] = list_field(&r, "time", "s");
        columns[1] = list_field(&r, "value", NULL);
    }
    if (columns[0].n != columns[1].n)
        lw__lua_bad(&r, "time has %d numbers and value %d; one length is wanted", columns[0].n,
                    columns[1].n);
    lw_source_def def = lw_source_default(LW_SOURCE_TABLE);
    def.linear = p.lines;
    def.n = columns[0].n;
    def.time = join(L, columns);
    def.value = def.time + def.n;
    int numbers = lua_gettop(L);
    new_source(L, &def);
    lua_pushvalue(L, numbers);
    lua_setiuservalue(L, -2, SOURCE_NUMBERS);
    return 1;
}

// ---- a Lua function of time

static const lw__lua_field own_fields[] = {
    REQUIRED(lw_source_def, every, "every", FIELD_PERIOD, NULL), OTHER("value")};

static int value_at(void *context, double t, double *value)
{
    lw__lua_call *call = context;
    lua_State *L = call->thread;
    if (call->busy)
        return lw__lua_call_again(call);
    lua_pushvalue(L, CALL_FUNCTION);
    lua_pushnumber(L, t);
    call->busy = 1;
    int status = lua_pcall(L, 1, 1, 0);
    call->busy = 0;
    if (status != LUA_OK)
        return lw__lua_call_failed(call);
    if (lua_type(L, -1) != LUA_TNUMBER)
        return lw__lua_call_returned(call, -1, "its value");
    *value = lua_tonumber(L, -1);
    lua_settop(L, call->top);
    return 0;
}

int lw__lua_source_own(lua_State *L)
{
    lw_source_def def = lw_source_default(LW_SOURCE_FUNCTION);
    lw__lua_reader r = lw__lua_read(L, 1, "source own");
    LW__LUA_FIELDS(&r, own_fields, 0, &def);
    if (lw__lua_push_field(&r, "value") == LUA_TNIL)
        lw__lua_bad(&r, "value is missing; a function of the time is wanted");
    int function = lua_gettop(L);
    lw__lua_call_check(&r, "value", function);
    lw__lua_source *box = new_source(L, &def);
    int index = lua_gettop(L);
    lw__lua_call *call = lw__lua_call_new(L, function, sizeof *call, 4);
    lua_setiuservalue(L, index, SOURCE_CALL);
    box->def.function = value_at;
    box->def.context = call;
    return 1;
}
