// What the files that describe a frozen rig share: lines, and quantities in words.
#ifndef LATEWOOD_RUN_DESCRIBE_H
#define LATEWOOD_RUN_DESCRIBE_H

#include "run/frozen.h"

#include <latewood/quantity.h>

#include <math.h>
#include <stdarg.h>
#include <stdio.h>

typedef struct writer {
    int (*line)(void *context, const char *text);
    void *context;
    int stopped;
} writer;

static inline void say(writer *w, const char *format, ...) LW_PRINTF(2, 3);
static inline void say(writer *w, const char *format, ...)
{
    char text[700];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    if (!w->stopped)
        w->stopped = w->line(w->context, text);
}

static inline void say_plain(void *context, const char *text)
{
    say(context, "%s", text);
}

// A time in words: "50 us".
typedef struct words {
    char text[240];
} words;

static inline words time_words(lw_tick t)
{
    words w;
    if (t == LW_NEVER)
        snprintf(w.text, sizeof w.text, "never");
    else
        lw_tick_format(t, w.text);
    return w;
}

static inline words period_words(lw_period p)
{
    words w;
    if (p.den == 1)
        return time_words(p.num);
    snprintf(w.text, sizeof w.text, "%.9g Hz", 1e12 * (double)p.den / (double)p.num);
    return w;
}

static inline words number_words(double v)
{
    words w;
    lw_double_format(v, w.text);
    return w;
}

// Cores and tasks, buses and frames.
void lw__describe_cpu(writer *w, const lw_frozen *z);

#endif
