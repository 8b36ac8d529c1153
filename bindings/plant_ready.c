// Further ready plants (ready.h): each a table of its data-sheet values, and start and delay.

#include "fields.h"
#include "module.h"
#include "plant.h"

#include <latewood/ready.h>
#include <math.h>

typedef struct laid_over {
    lw__lua_list start;
} laid_over;

#define LAID_OVER(type) OPTIONAL(type, over.start, "start", FIELD_LIST, NULL), OTHER("delay")

static void must(const lw__lua_reader *r, lw_status status, const lw_error *err)
{
    if (status == LW_OK)
        return;
    lua_pushstring(r->L, err->text);
    lw__lua_bad(r, "%s", lua_tostring(r->L, -1));
}

// Start and delay laid over the plant; the box is at `index`.
static int finish(const lw__lua_reader *r, int index, const laid_over *over)
{
    lw_error err = {LW_OK, ""};
    lw__lua_plant *box = lua_touserdata(r->L, index);
    lw__lua_plant_delays(r, box);
    if (over->start.v != NULL) {
        lw_plant *started = NULL;
        int n_x = lw_plant_look(box->it).n_x;
        if (over->start.n != n_x)
            lw__lua_bad(r, "start has %d numbers; the plant has %d states", over->start.n, n_x);
        must(r, lw_plant_started(box->it, n_x, over->start.v, &started, &err), &err);
        lw_plant_free(box->it);
        box->it = started;
    }
    lua_pushvalue(r->L, index);
    return 1;
}

// Reads `fields` into `d`, which holds the parameters of plant `name`.
#define READ(name, d)                                                                              \
    lw_error err = {LW_OK, ""};                                                                    \
    lw__lua_reader r = lw__lua_read(L, 1, "plant " #name);                                         \
    LW__LUA_FIELDS(&r, name##_fields, 0, &(d));                                                    \
    lw__lua_plant *box = lw__lua_new(L, LW__LUA_PLANT, sizeof *box, 0);                            \
    int index = lua_gettop(L);                                                                     \
    must(&r, lw_plant_##name(&(d).p, &box->it, &err), &err);                                       \
    return finish(&r, index, &(d).over)

typedef struct lc_filter_of {
    laid_over over;
    lw_lc_filter p;
} lc_filter_of;

static const lw__lua_field lc_filter_fields[] = {
    REQUIRED(lc_filter_of, p.inductance, "inductance", FIELD_NUMBER, "H"),
    REQUIRED(lc_filter_of, p.capacitance, "capacitance", FIELD_NUMBER, "F"),
    OPTIONAL(lc_filter_of, p.coil_resistance, "coil_resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(lc_filter_of, p.capacitor_resistance, "capacitor_resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(lc_filter_of, p.load_resistance, "load_resistance", FIELD_NUMBER, "ohm"),
    LAID_OVER(lc_filter_of),
};

int lw__lua_plant_lc_filter(lua_State *L)
{
    lc_filter_of d = {.p = {.load_resistance = (double)INFINITY}};
    READ(lc_filter, d);
}

typedef struct thermal_lag_of {
    laid_over over;
    lw_thermal_lag p;
} thermal_lag_of;

static const lw__lua_field thermal_lag_fields[] = {
    REQUIRED(thermal_lag_of, p.resistance, "resistance", FIELD_NUMBER, NULL),
    REQUIRED(thermal_lag_of, p.capacity, "capacity", FIELD_NUMBER, NULL),
    OPTIONAL(thermal_lag_of, p.stages, "stages", FIELD_COUNT, NULL),
    LAID_OVER(thermal_lag_of),
};

int lw__lua_plant_thermal_lag(lua_State *L)
{
    thermal_lag_of d = {.p = {.stages = 1}};
    READ(thermal_lag, d);
}

typedef struct converter {
    laid_over over;
    lw_averaged_converter p;
} converter;

static const lw__lua_field buck_fields[] = {
    REQUIRED(converter, p.inductance, "inductance", FIELD_NUMBER, "H"),
    REQUIRED(converter, p.capacitance, "capacitance", FIELD_NUMBER, "F"),
    OPTIONAL(converter, p.resistance, "resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(converter, p.load_resistance, "load_resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(converter, p.load_power, "load_power", FIELD_NUMBER, "W"),
    LAID_OVER(converter),
};

int lw__lua_plant_buck(lua_State *L)
{
    converter d = {.p = {.load_resistance = (double)INFINITY}};
    READ(buck, d);
}

static const lw__lua_field boost_fields[] = {
    REQUIRED(converter, p.inductance, "inductance", FIELD_NUMBER, "H"),
    REQUIRED(converter, p.capacitance, "capacitance", FIELD_NUMBER, "F"),
    OPTIONAL(converter, p.resistance, "resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(converter, p.load_resistance, "load_resistance", FIELD_NUMBER, "ohm"),
    OPTIONAL(converter, p.load_power, "load_power", FIELD_NUMBER, "W"),
    LAID_OVER(converter),
};

int lw__lua_plant_boost(lua_State *L)
{
    converter d = {.p = {.load_resistance = (double)INFINITY}};
    READ(boost, d);
}

typedef struct magnet_machine_of {
    laid_over over;
    lw_magnet_machine p;
} magnet_machine_of;

static const lw__lua_field magnet_machine_fields[] = {
    REQUIRED(magnet_machine_of, p.resistance, "resistance", FIELD_NUMBER, "ohm"),
    REQUIRED(magnet_machine_of, p.d_inductance, "d_inductance", FIELD_NUMBER, "H"),
    REQUIRED(magnet_machine_of, p.q_inductance, "q_inductance", FIELD_NUMBER, "H"),
    REQUIRED(magnet_machine_of, p.flux, "flux", FIELD_NUMBER, "V s"),
    REQUIRED(magnet_machine_of, p.inertia, "inertia", FIELD_NUMBER, "kg m^2"),
    OPTIONAL(magnet_machine_of, p.friction, "friction", FIELD_NUMBER, "N m s"),
    REQUIRED(magnet_machine_of, p.pole_pairs, "pole_pairs", FIELD_COUNT, NULL),
    LAID_OVER(magnet_machine_of),
};

int lw__lua_plant_magnet_machine(lua_State *L)
{
    magnet_machine_of d = {.p = {.pole_pairs = 1}};
    READ(magnet_machine, d);
}

typedef struct pendulum_of {
    laid_over over;
    lw_pendulum p;
} pendulum_of;

static const lw__lua_field pendulum_fields[] = {
    REQUIRED(pendulum_of, p.inertia, "inertia", FIELD_NUMBER, "kg m^2"),
    REQUIRED(pendulum_of, p.weight_torque, "weight_torque", FIELD_NUMBER, "N m"),
    OPTIONAL(pendulum_of, p.viscous, "viscous", FIELD_NUMBER, "N m s"),
    OPTIONAL(pendulum_of, p.dry, "dry", FIELD_NUMBER, "N m"),
    OPTIONAL(pendulum_of, p.breakaway, "breakaway", FIELD_NUMBER, "N m"),
    LAID_OVER(pendulum_of),
};

int lw__lua_plant_pendulum(lua_State *L)
{
    pendulum_of d = {.p = {.inertia = 0}};
    READ(pendulum, d);
}

typedef struct tank_of {
    laid_over over;
    lw_tank p;
} tank_of;

static const lw__lua_field tank_fields[] = {
    REQUIRED(tank_of, p.area, "area", FIELD_NUMBER, "m^2"),
    REQUIRED(tank_of, p.outlet_area, "outlet_area", FIELD_NUMBER, "m^2"),
    OPTIONAL(tank_of, p.gravity, "gravity", FIELD_NUMBER, "m/s^2"),
    LAID_OVER(tank_of),
};

int lw__lua_plant_tank(lua_State *L)
{
    tank_of d = {.p = {.area = 0}};
    READ(tank, d);
}
