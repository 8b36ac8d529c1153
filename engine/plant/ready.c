// Ready plants from data-sheet values. Equations stand in the public header.

#include <latewood/plant.h>

#include <math.h>
#include <stddef.h>

typedef enum range { ANY, FROM_ZERO, ABOVE_ZERO } range;

typedef struct parameter {
    const char *name;
    double value;
    range permitted;
} parameter;

static lw_status check(int n, const parameter *list, lw_error *err)
{
    static const char *const words[] = {"a finite number is wanted", "permitted from 0 on",
                                        "permitted above 0"};
    for (int i = 0; i < n; i++) {
        double v = list[i].value;
        int fits = isfinite(v) && (list[i].permitted == ANY ||
                                   (list[i].permitted == FROM_ZERO ? v >= 0 : v > 0));
        if (!fits)
            return lw_error_set(err, LW_ERR_ARGUMENT, "%s is %g; %s", list[i].name, v,
                                words[list[i].permitted]);
    }
    return LW_OK;
}

#define CHECK(list, err)                                                                           \
    do {                                                                                           \
        lw_status status_ = check((int)(sizeof list / sizeof list[0]), list, err);                 \
        if (status_ != LW_OK)                                                                      \
            return status_;                                                                        \
    } while (0)

lw_status lw_plant_integrator(double gain, lw_plant **out, lw_error *err)
{
    const parameter p[] = {{"gain", gain, ANY}};
    CHECK(p, err);
    const double a = 0, c = 1;
    return lw_plant_state_space(1, 1, 1, &a, &gain, &c, NULL, NULL, NULL, NULL, NULL, out, err);
}

lw_status lw_plant_first_order(double gain, double time_constant, lw_plant **out, lw_error *err)
{
    const parameter p[] = {{"gain", gain, ANY}, {"time_constant", time_constant, ABOVE_ZERO}};
    CHECK(p, err);
    const double a = -1 / time_constant, b = gain / time_constant, c = 1;
    return lw_plant_state_space(1, 1, 1, &a, &b, &c, NULL, NULL, NULL, NULL, NULL, out, err);
}

lw_status lw_plant_second_order(double gain, double natural_frequency, double damping,
                                lw_plant **out, lw_error *err)
{
    const parameter p[] = {{"gain", gain, ANY},
                           {"natural_frequency", natural_frequency, ABOVE_ZERO},
                           {"damping", damping, ANY}};
    CHECK(p, err);
    static const char *const states[] = {"out", "rate"};
    double w = natural_frequency;
    const double a[] = {0, 1, -w * w, -2 * damping * w}, b[] = {0, gain * w * w}, c[] = {1, 0};
    return lw_plant_state_space(2, 1, 1, a, b, c, NULL, NULL, states, NULL, NULL, out, err);
}

lw_status lw_plant_winding(double resistance, double inductance, lw_plant **out, lw_error *err)
{
    const parameter p[] = {{"resistance", resistance, FROM_ZERO},
                           {"inductance", inductance, ABOVE_ZERO}};
    CHECK(p, err);
    static const char *const current[] = {"current"}, *const voltage[] = {"voltage"};
    const double a = -resistance / inductance, b = 1 / inductance, c = 1;
    return lw_plant_state_space(1, 1, 1, &a, &b, &c, NULL, NULL, current, voltage, current, out,
                                err);
}

lw_status lw_plant_dc_machine(const lw_dc_machine *m, lw_plant **out, lw_error *err)
{
    double ke = isnan(m->back_emf_constant) ? m->torque_constant : m->back_emf_constant;
    const parameter p[] = {{"resistance", m->resistance, FROM_ZERO},
                           {"inductance", m->inductance, ABOVE_ZERO},
                           {"torque_constant", m->torque_constant, ANY},
                           {"back_emf_constant", ke, ANY},
                           {"inertia", m->inertia, ABOVE_ZERO},
                           {"friction", m->friction, FROM_ZERO}};
    CHECK(p, err);
    static const char *const names[] = {"current", "speed"},
                             *const inputs[] = {"voltage", "load_torque"};
    double l = m->inductance, j = m->inertia;
    const double a[] = {-m->resistance / l, -ke / l, m->torque_constant / j, -m->friction / j};
    const double b[] = {1 / l, 0, 0, -1 / j}, c[] = {1, 0, 0, 1};
    return lw_plant_state_space(2, 2, 2, a, b, c, NULL, NULL, names, inputs, names, out, err);
}

lw_status lw_plant_two_mass_drive(const lw_two_mass_drive *m, lw_plant **out, lw_error *err)
{
    double ke = isnan(m->back_emf_constant) ? m->torque_constant : m->back_emf_constant;
    const parameter p[] = {{"resistance", m->resistance, FROM_ZERO},
                           {"inductance", m->inductance, ABOVE_ZERO},
                           {"torque_constant", m->torque_constant, ANY},
                           {"back_emf_constant", ke, ANY},
                           {"motor_inertia", m->motor_inertia, ABOVE_ZERO},
                           {"load_inertia", m->load_inertia, ABOVE_ZERO},
                           {"stiffness", m->stiffness, ABOVE_ZERO},
                           {"damping", m->damping, FROM_ZERO},
                           {"motor_friction", m->motor_friction, FROM_ZERO},
                           {"load_friction", m->load_friction, FROM_ZERO}};
    CHECK(p, err);
    static const char *const names[] = {"current", "motor_speed", "twist", "load_speed",
                                        "load_angle"},
                             *const inputs[] = {"voltage", "load_torque"};
    double l = m->inductance, jm = m->motor_inertia, jl = m->load_inertia, k = m->stiffness,
           c = m->damping;
    // clang-format off
    const double a[] = {
        -m->resistance / l,      -ke / l,                       0,       0,                         0,
        m->torque_constant / jm, -(m->motor_friction + c) / jm, -k / jm, c / jm,                    0,
        0,                       1,                             0,       -1,                        0,
        0,                       c / jl,                        k / jl,  -(m->load_friction + c) / jl, 0,
        0,                       0,                             0,       1,                         0};
    const double b[] = {1 / l, 0,  0, 0,  0, 0,  0, -1 / jl,  0, 0};
    // clang-format on
    const double identity[] = {1, 0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0, 1,
                               0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0, 1};
    return lw_plant_state_space(5, 2, 5, a, b, identity, NULL, NULL, names, inputs, names, out,
                                err);
}
