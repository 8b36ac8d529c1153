// Encoders, what stands before an adc, white noise.

#include "rig.h"

#include "module.h"

#include <latewood/sensor.h>
#include <string.h>

// ---- before an adc

// The table of a field as a reader of its own; 0 where it is not there.
static int table_field(const lw__lua_reader *r, const char *field, lw__lua_reader *out)
{
    lua_State *L = r->L;
    int type = lw__lua_push_field(r, field);
    if (type == LUA_TNIL)
        return 0;
    if (type != LUA_TTABLE)
        lw__lua_bad_type(r, field, -1, "a table");
    *out = *r;
    out->table = lua_gettop(L);
    out->subject = lua_pushfstring(L, "%s: %s", r->subject, field);
    return 1;
}

typedef struct analog {
    int kind, order;
    double cut_off;
} analog;

static const char *const kinds[] = {"RC", "Butterworth", "Bessel", NULL};

static const lw__lua_field analog_fields[] = {
    CHOICE(analog, kind, "kind", kinds),
    OPTIONAL(analog, order, "order", FIELD_COUNT, NULL),
    REQUIRED(analog, cut_off, "cut_off", FIELD_NUMBER, "Hz"),
};

static const lw__lua_field sinc_fields[] = {
    REQUIRED(lw_adc_front, sinc_order, "order", FIELD_COUNT, NULL),
    REQUIRED(lw_adc_front, ratio, "ratio", FIELD_COUNT, NULL),
    REQUIRED(lw_adc_front, clock, "clock", FIELD_PERIOD, NULL),
};

void lw__lua_read_front(const lw__lua_reader *r, lw_adc_front *front)
{
    lw__lua_reader own;
    if (table_field(r, "analog", &own)) {
        analog p = {0, 1, 0};
        LW__LUA_FIELDS(&own, analog_fields, 0, &p);
        front->analog = (lw_analog_kind)(LW_ANALOG_RC + p.kind);
        front->analog_order = p.order;
        front->cut_off = p.cut_off;
    }
    if (table_field(r, "filter", &own)) {
        lua_rawgeti(own.L, own.table, 1);
        const char *name = lua_type(own.L, -1) == LUA_TSTRING ? lua_tostring(own.L, -1) : "";
        if (strcmp(name, "sinc") != 0)
            lw__lua_bad(&own, "its first element is the kind of filter: \"sinc\"");
        LW__LUA_FIELDS(&own, sinc_fields, 1, front);
        if (front->sinc_order == 0)
            lw__lua_bad(&own, "order is 0; permitted 1 to 4");
    }
}

// ---- encoders

static const lw__lua_field encoder_fields[] = {
    REQUIRED(lw_encoder_def, of, "of", FIELD_TEXT, NULL),
    REQUIRED(lw_encoder_def, counts, "counts", FIELD_COUNT, NULL),
    REQUIRED(lw_encoder_def, every, "every", FIELD_PERIOD, NULL),
    OPTIONAL(lw_encoder_def, offset, "offset", FIELD_NUMBER, "s"),
    OPTIONAL(lw_encoder_def, turn, "turn", FIELD_NUMBER, NULL),
    OPTIONAL(lw_encoder_def, zero, "zero", FIELD_NUMBER, NULL),
    OPTIONAL(lw_encoder_def, speed_over, "speed_over", FIELD_COUNT, NULL),
    OPTIONAL(lw_encoder_def, speed_edges, "speed_edges", FIELD_COUNT, NULL),
    OPTIONAL(lw_encoder_def, edge_clock, "edge_clock", FIELD_PERIOD, NULL),
    OPTIONAL(lw_encoder_def, zero_after, "zero_after", FIELD_NUMBER, "s"),
};

int lw__lua_rig_encoder(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw_encoder_def def = lw_encoder_default();
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "encoder", &def.name);
    LW__LUA_FIELDS(&r, encoder_fields, 1, &def);
    def.origin = r.origin;
    return lw__lua_rig_added(&r, lw_rig_add_encoder(rig->it, &def, &err), &err);
}

// ---- white noise

static const lw__lua_field noise_fields[] = {
    REQUIRED(lw_noise_def, on, "on", FIELD_TEXT, NULL),
    REQUIRED(lw_noise_def, density, "density", FIELD_NUMBER, NULL),
};

int lw__lua_rig_noise(lua_State *L)
{
    lw_error err = {LW_OK, ""};
    lw_noise_def def = {0};
    lw__lua_rig *rig = lw__lua_rig_self(L);
    lw__lua_reader r = lw__lua_rig_read(L, "noise", &def.name);
    LW__LUA_FIELDS(&r, noise_fields, 1, &def);
    def.origin = r.origin;
    return lw__lua_rig_added(&r, lw_rig_add_noise(rig->it, &def, &err), &err);
}
