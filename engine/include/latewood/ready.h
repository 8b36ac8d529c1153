// Further ready plants, from data-sheet values: filters, averaged converters, machines, mechanics,
// fluids, heat. Every state is an output of the same name. Zero where a parameter is optional.
//
//   errors  LW_ERR_ARGUMENT parameter, value and permitted range
#ifndef LATEWOOD_READY_H
#define LATEWOOD_READY_H

#include <latewood/plant.h>

#ifdef __cplusplus
extern "C" {
#endif

// L C filter. Inputs voltage, load_current; states current (of the coil), voltage (of the
// capacitor); output "out" is the voltage at the load, the capacitor's series resistance included.
//   L i' = voltage - r i - out,  C v' = ic,  ic = i - out/load - load_current,  out = v + esr ic
typedef struct lw_lc_filter {
    double inductance, capacitance, coil_resistance, capacitor_resistance;
    double load_resistance; // above 0; may be infinite
} lw_lc_filter;
LW_API lw_status lw_plant_lc_filter(const lw_lc_filter *p, lw_plant **out, lw_error *err);

// Heat through n equal stages to the ambient (a ladder of R/n and C/n). Inputs power, ambient;
// states temperature1 (where the power enters) to temperature<n>, temperature where n is 1.
typedef struct lw_thermal_lag {
    double resistance, capacity; // K/W and J/K
    int stages;                  // 1 to 32
} lw_thermal_lag;
LW_API lw_status lw_plant_thermal_lag(const lw_thermal_lag *p, lw_plant **out, lw_error *err);

// Converters averaged over a period of the switch, in continuous conduction. Inputs duty (0..1),
// supply, load_current; states current, voltage.
//   R. D. Middlebrook, S. Cuk, PESC 1976, 18-34 (from memory)
//   buck   L i' = d E - r i - v,          C v' = i - v/load - load_current - P/v
//   boost  L i' = E - r i - (1 - d) v,    C v' = (1 - d) i - v/load - load_current - P/v
// P: a load that takes constant power. The duty counts within 0..1.
typedef struct lw_averaged_converter {
    double inductance, capacitance, resistance, load_power;
    double load_resistance; // above 0; may be infinite
} lw_averaged_converter;
LW_API lw_status lw_plant_buck(const lw_averaged_converter *p, lw_plant **out, lw_error *err);
LW_API lw_status lw_plant_boost(const lw_averaged_converter *p, lw_plant **out, lw_error *err);

// Permanent-magnet synchronous machine in coordinates of the rotor (R. H. Park, AIEE Trans. 48
// (1929) 716-727; amplitude-invariant). Inputs d_voltage, q_voltage, load_torque; states d_current,
// q_current, speed (mechanical), angle; output torque. w = pole_pairs speed:
//   Ld id' = vd - R id + w Lq iq,   Lq iq' = vq - R iq - w (Ld id + flux)
//   torque = 3/2 pole_pairs (flux iq + (Ld - Lq) id iq),  J speed' = torque - b speed - load_torque
typedef struct lw_magnet_machine {
    double resistance, d_inductance, q_inductance, flux, inertia, friction;
    int pole_pairs; // 1 to 100
} lw_magnet_machine;
LW_API lw_status lw_plant_magnet_machine(const lw_magnet_machine *p, lw_plant **out, lw_error *err);

// Pendulum, or any body out of balance: angle from where it hangs. Input torque; states angle,
// speed. J = inertia about the axis, weight_torque = m g times the distance of the centre of mass:
//   J speed' = torque - weight_torque sin(angle) - viscous speed - dry (way it moves)
// Dry friction holds it at rest until the other torques exceed `breakaway` (dry where 0).
typedef struct lw_pendulum {
    double inertia, weight_torque, viscous, dry, breakaway;
} lw_pendulum;
LW_API lw_status lw_plant_pendulum(const lw_pendulum *p, lw_plant **out, lw_error *err);

// Tank with an outlet (Torricelli's law). Input inflow (m^3/s); state level (m), never below 0;
// output outflow.  area level' = inflow - outflow,  outflow = outlet_area sqrt(2 g level)
typedef struct lw_tank {
    double area, outlet_area, gravity; // gravity: 9.80665 where 0
} lw_tank;
LW_API lw_status lw_plant_tank(const lw_tank *p, lw_plant **out, lw_error *err);

#ifdef __cplusplus
}
#endif
#endif
