// Status codes and error messages.
//
// Every fallible function returns a lw_status: negative failed, zero done, positive stopped for a
// reason. A lw_error, where given, holds the message in the user's words:
// `adc "current": bits is 99; permitted 1 to 32`. After a failure the outputs are untouched unless
// a function says otherwise.
#ifndef LATEWOOD_STATUS_H
#define LATEWOOD_STATUS_H

#include <stdarg.h>

#ifdef __cplusplus
extern "C" {
#endif

#if defined(__GNUC__) && defined(LW_SHARED)
#define LW_API __attribute__((visibility("default")))
#else
#define LW_API
#endif

#if defined(__GNUC__)
#define LW_PRINTF(a, b) __attribute__((format(printf, a, b)))
#else
#define LW_PRINTF(a, b)
#endif

// X(name, value, text): code, its value, and what it means.
#define LW_STATUS_LIST(X)                                                                          \
    X(LW_STOPPED, 1, "a stop condition held")                                                      \
    X(LW_OK, 0, "done")                                                                            \
    X(LW_ERR_MEMORY, -1, "memory could not be had")                                                \
    X(LW_ERR_ARGUMENT, -2, "a field or an argument is outside its permitted range")                \
    X(LW_ERR_UNIT, -3, "a quantity has a unit that does not fit")                                  \
    X(LW_ERR_NAME, -4, "a name is not known, or not allowed")                                      \
    X(LW_ERR_DUPLICATE, -5, "a name, an input or a draw stream is used twice")                     \
    X(LW_ERR_LOOP, -6, "signals depend on themselves without delay")                               \
    X(LW_ERR_SHAPE, -7, "a matrix or a list has a shape that does not fit")                        \
    X(LW_ERR_TIME, -8, "an instant or a duration is outside the range of time")                    \
    X(LW_ERR_NOT_FINITE, -9, "a value became infinite or not a number")                            \
    X(LW_ERR_CAPACITY, -10, "a stated capacity is full")                                           \
    X(LW_ERR_PASSES, -11, "more than 1000 passes at one instant")                                  \
    X(LW_ERR_LAW, -12, "a control law or a source function failed")                                \
    X(LW_ERR_INPUT, -13, "a file is missing or cannot be read as what it should be")               \
    X(LW_ERR_OUTPUT, -14, "a file cannot be written")                                              \
    X(LW_ERR_INTERNAL, -15, "an invariant of the engine does not hold")                            \
    X(LW_ERR_STEP, -16, "an integration cannot go on: its step size collapsed")                    \
    X(LW_ERR_PROCESS, -20, "a process was lost, or could not be started")                          \
    X(LW_ERR_CHATTER, -21, "something switches to and fro while hardly any time passes")           \
    X(LW_ERR_FIT, -22, "data do not determine what is fitted to them")

typedef enum lw_status {
#define LW_STATUS_ENUM(name, value, text) name = value,
    LW_STATUS_LIST(LW_STATUS_ENUM)
#undef LW_STATUS_ENUM
} lw_status;

#define LW_ERROR_TEXT 480

typedef struct lw_error {
    lw_status status;         // LW_OK until something failed
    char text[LW_ERROR_TEXT]; // NUL-terminated UTF-8, truncated at a character boundary
} lw_error;

// Name of a status as written in the header ("LW_ERR_UNIT"), and its meaning. Never NULL.
LW_API const char *lw_status_name(lw_status status);
LW_API const char *lw_status_text(lw_status status);

// Set `err` (may be NULL) and return `status`. Arguments may point into `err->text`.
LW_API lw_status lw_error_set(lw_error *err, lw_status status, const char *format, ...)
    LW_PRINTF(3, 4);
// Put text before the message already there ("adc \"current\": " + ...).
LW_API void lw_error_prefix(lw_error *err, const char *format, ...) LW_PRINTF(2, 3);

// The name in `names` (n of them) nearest to `name` by edit distance (Damerau, optimal string
// alignment), or NULL if none is near enough to be a likely slip.
LW_API const char *lw_nearest_name(const char *name, const char *const *names, int n);

#ifdef __cplusplus
}
#endif
#endif
