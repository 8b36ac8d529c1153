// Writing of numbers and times.

#include <latewood/quantity.h>

#include <float.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

// The locale may write any characters for the decimal point.
static void set_point(char *text)
{
    char *to = text;
    for (const char *from = text; *from != 0;) {
        size_t kept = strspn(from, "0123456789+-e");
        memmove(to, from, kept);
        to += kept;
        from += kept;
        if (*from != 0) {
            *to++ = '.';
            from += strcspn(from, "0123456789+-e");
        }
    }
    *to = 0;
}

// Take the last digit off the 17 of `text` and add one to the digit before it.
static void round_up(char *text)
{
    char *digit = text + strcspn(text, "e") - 1;
    memmove(digit, digit + 1, strlen(digit));
    while (--digit > text && (*digit < '0' || *digit > '8'))
        if (*digit == '9')
            *digit = '0';
    *digit = (char)(*digit + 1); // what is no digit now does not read back
}

// Where doubles are normal, 15 digits never need to be fewer: every decimal of up to 15 digits
// comes back from them as it was. The decimal of 16 digits nearest to a power of two may miss it
// where the one above reads back, as doubles lie twice as far apart above as below.
char *lw_double_format(double value, char *buffer)
{
    char text[64], shorter[64];
    if (isnan(value) || isinf(value))
        return strcpy(buffer, isnan(value) ? "nan" : value < 0 ? "-inf" : "inf");
    int digits = fabs(value) >= DBL_MIN ? 15 : 1;
    for (; digits <= 17; digits++) {
        snprintf(text, sizeof text, "%.*g", digits, value);
        if (strtod(text, NULL) == value)
            break;
    }
    if (digits == 17) {
        round_up(strcpy(shorter, text));
        if (strtod(shorter, NULL) == value)
            strcpy(text, shorter);
    }
    set_point(text);
    return strcpy(buffer, text);
}

char *lw_tick_format(lw_tick tick, char *buffer)
{
    static const struct {
        uint64_t ticks;
        int digits;
        const char *name;
    } steps[] = {{UINT64_C(1000000000000), 12, "s"},
                 {UINT64_C(1000000000), 9, "ms"},
                 {UINT64_C(1000000), 6, "us"},
                 {UINT64_C(1000), 3, "ns"},
                 {UINT64_C(1), 0, "ps"}};
    uint64_t size = tick < 0 ? 0 - (uint64_t)tick : (uint64_t)tick;
    size_t k = 0;
    while (tick != 0 && k < 4 && size < steps[k].ticks)
        k++;
    uint64_t whole = size / steps[k].ticks, part = size % steps[k].ticks;
    int length = snprintf(buffer, 40, "%s%llu", tick < 0 ? "-" : "", (unsigned long long)whole);
    if (part != 0) {
        length +=
            snprintf(buffer + length, 20, ".%0*llu", steps[k].digits, (unsigned long long)part);
        while (buffer[length - 1] == '0')
            length--;
    }
    snprintf(buffer + length, 8, " %s", steps[k].name);
    return buffer;
}
