// Laws to test, and numbers to test them with.
#ifndef LATEWOOD_TESTS_LAWS_H
#define LATEWOOD_TESTS_LAWS_H

#include <latewood/law.h>

#include <math.h>
#include <stdint.h>
#include <string.h>

// Uniform in [-1, 1): splitmix64 (Steele, Lea, Flood 2014).
static inline double uniform(uint64_t *seed)
{
    uint64_t z = (*seed += UINT64_C(0x9e3779b97f4a7c15));
    z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
    return (double)((z ^ (z >> 31)) >> 11) * 0x1p-52 - 1;
}

static inline int same_bits(double a, double b)
{
    return memcmp(&a, &b, sizeof a) == 0;
}

enum { N_VARIANTS = 4 * 4 * 32 * 4 };

// Variant `v` of P, PI, PD and PID; 0 where the combination is not permitted.
static inline int variant(int v, const char **kind, lw_pid *p)
{
    static const char *const kinds[] = {"p", "pi", "pd", "pid"};
    *p = lw_pid_default();
    *kind = kinds[v % 4];
    int has_i = strchr(*kind, 'i') != NULL, has_d = strchr(*kind, 'd') != NULL;
    v /= 4;
    p->anti_windup = (lw_anti_windup)(v % 4);
    v /= 4;
    p->integration = (lw_integration)(v % 2);
    p->update_first = v / 2 % 2;
    p->use_measured_dt = v / 4 % 2;
    p->derivative_on_measured = v / 8 % 2;
    p->filter = v / 16 % 2 ? 0.0007 : 0;
    v /= 32;
    p->lo = v % 2 ? -0.9 : NAN;
    p->hi = v / 2 % 2 ? 1.1 : NAN;
    p->kp = 0.8;
    p->ki = has_i ? 130 : 0;
    p->kd = has_d ? 0.0004 : 0;
    p->kb = p->anti_windup == LW_WINDUP_BACK_CALCULATION ? 90 : 0;
    p->start = has_i ? 0.3 : 0;
    int unlimited = isnan(p->lo) && isnan(p->hi);
    return (has_i || (p->anti_windup == 0 && p->integration == 0 && !p->update_first)) &&
           (has_d || (p->filter == 0 && !p->derivative_on_measured)) &&
           (p->anti_windup == 0 || !unlimited);
}

#endif
