// The ready plants, from data-sheet values. Their equations stand in the public header.
//
// Invariants
// 1. Parameters are checked by one table a plant: name, value, permitted range.
// 2. Every state is an output of the same name, or is named in the public header.
// 3. An element of a matrix is formed with as few roundings as its formula has operations.

#include "plant/plant.h"

#include <math.h>
#include <stddef.h>

typedef enum range { ANY, FROM_ZERO, ABOVE_ZERO } range;

typedef struct parameter {
    const char *name;
    double value;
    range permitted;
} parameter;

static int is_permitted(const parameter *p)
{
    switch (p->permitted) {
    case FROM_ZERO:
        return isfinite(p->value) && p->value >= 0;
    case ABOVE_ZERO:
        return isfinite(p->value) && p->value > 0;
    case ANY:
        break;
    }
    return isfinite(p->value);
}

static lw_status check(int n, const parameter *list, lw_error *err)
{
    static const char *const words[] = {
        [ANY] = "a finite number is wanted",
        [FROM_ZERO] = "permitted 0 or more",
        [ABOVE_ZERO] = "permitted above 0",
    };
    for (int i = 0; i < n; i++)
        if (!is_permitted(&list[i]))
            return lw__plant_bad(LW_ERR_ARGUMENT, list[i].name, list[i].value,
                                 words[list[i].permitted], err);
    return LW_OK;
}

#define N_OF(list) ((int)(sizeof(list) / sizeof *(list)))

// The plant of n states, all of them outputs.
static lw_status make(int n, int n_u, const double *a, const double *b, const char *const *states,
                      const char *const *inputs, lw_plant **out, lw_error *err)
{
    double identity[LW_PLANT_MAX_STATES] = {0};
    for (int i = 0; i < n; i++)
        identity[i * n + i] = 1;
    return lw_plant_state_space(n, n_u, n, a, b, identity, NULL, NULL, states, inputs, states, out,
                                err);
}

static const char *const out_name[] = {"out"}, *const in_name[] = {"in"};

lw_status lw_plant_integrator(double gain, lw_plant **out, lw_error *err)
{
    const parameter list[] = {{"gain", gain, ANY}};
    lw_status status = check(N_OF(list), list, err);
    const double a = 0;
    return status == LW_OK ? make(1, 1, &a, &gain, out_name, in_name, out, err) : status;
}

lw_status lw_plant_first_order(double gain, double time_constant, lw_plant **out, lw_error *err)
{
    const parameter list[] = {{"gain", gain, ANY}, {"time_constant", time_constant, ABOVE_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    const double a = -1 / time_constant, b = gain / time_constant;
    return status == LW_OK ? make(1, 1, &a, &b, out_name, in_name, out, err) : status;
}

lw_status lw_plant_second_order(double gain, double natural_frequency, double damping,
                                lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"out", "rate"};
    const parameter list[] = {{"gain", gain, ANY},
                              {"natural_frequency", natural_frequency, ABOVE_ZERO},
                              {"damping", damping, ANY}};
    lw_status status = check(N_OF(list), list, err);
    const double w = natural_frequency, c[] = {1, 0};
    const double a[] = {0, 1, -(w * w), -(2 * damping * w)}, b[] = {0, gain * (w * w)};
    return status == LW_OK ? lw_plant_state_space(2, 1, 1, a, b, c, NULL, NULL, states, in_name,
                                                  out_name, out, err)
                           : status;
}

static const char *const electrical[] = {"voltage", "load_torque"};

lw_status lw_plant_winding(double resistance, double inductance, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"current"};
    const parameter list[] = {{"resistance", resistance, FROM_ZERO},
                              {"inductance", inductance, ABOVE_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    const double a = -(resistance / inductance), b = 1 / inductance;
    return status == LW_OK ? make(1, 1, &a, &b, states, electrical, out, err) : status;
}

// The voltage an angular speed induces; by energy the constant equals the torque constant.
static double back_emf(double stated, double torque_constant)
{
    return isnan(stated) ? torque_constant : stated;
}

lw_status lw_plant_dc_machine(const lw_dc_machine *p, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"current", "speed"};
    const double r = p->resistance, l = p->inductance, kt = p->torque_constant, j = p->inertia,
                 f = p->friction, ke = back_emf(p->back_emf_constant, kt);
    const parameter list[] = {{"resistance", r, FROM_ZERO}, {"inductance", l, ABOVE_ZERO},
                              {"torque_constant", kt, ANY}, {"back_emf_constant", ke, ANY},
                              {"inertia", j, ABOVE_ZERO},   {"friction", f, FROM_ZERO}};
    lw_status status = check(N_OF(list), list, err);
    const double a[] = {-(r / l), -(ke / l), kt / j, -(f / j)}, b[] = {1 / l, 0, 0, -1 / j};
    return status == LW_OK ? make(2, 2, a, b, states, electrical, out, err) : status;
}

static lw_status check_drive(const lw_two_mass_drive *p, lw_error *err)
{
    const parameter list[] = {
        {"resistance", p->resistance, FROM_ZERO},
        {"inductance", p->inductance, ABOVE_ZERO},
        {"torque_constant", p->torque_constant, ANY},
        {"back_emf_constant", back_emf(p->back_emf_constant, p->torque_constant), ANY},
        {"motor_inertia", p->motor_inertia, ABOVE_ZERO},
        {"load_inertia", p->load_inertia, ABOVE_ZERO},
        {"stiffness", p->stiffness, FROM_ZERO},
        {"damping", p->damping, FROM_ZERO},
        {"motor_friction", p->motor_friction, FROM_ZERO},
        {"load_friction", p->load_friction, FROM_ZERO},
    };
    return check(N_OF(list), list, err);
}

lw_status lw_plant_two_mass_drive(const lw_two_mass_drive *p, lw_plant **out, lw_error *err)
{
    static const char *const states[] = {"current", "motor_speed", "twist", "load_speed",
                                         "load_angle"};
    enum { I, WM, TWIST, WL, ANGLE, N };
    lw_status status = check_drive(p, err);
    if (status != LW_OK)
        return status;
    const double l = p->inductance, jm = p->motor_inertia, jl = p->load_inertia, k = p->stiffness,
                 c = p->damping, kt = p->torque_constant;
    const double a[N][N] = {
        [I] = {[I] = -(p->resistance / l), [WM] = -(back_emf(p->back_emf_constant, kt) / l)},
        [WM] = {[I] = kt / jm,
                [WM] = -((p->motor_friction + c) / jm),
                [TWIST] = -(k / jm),
                [WL] = c / jm},
        [TWIST] = {[WM] = 1, [WL] = -1},
        [WL] = {[WM] = c / jl, [TWIST] = k / jl, [WL] = -((p->load_friction + c) / jl)},
        [ANGLE] = {[WL] = 1},
    };
    const double b[N][2] = {[I] = {1 / l, 0}, [WL] = {0, -1 / jl}};
    return make(N, 2, &a[0][0], &b[0][0], states, electrical, out, err);
}
