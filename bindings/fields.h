// Reading a Lua table into a definition struct: one list of fields per constructor.
//
// The struct is filled with its defaults first; a field that the table does not have keeps them.
// Tables are read raw. What a struct then points to stands on the Lua stack until the constructor
// returns.
#ifndef LATEWOOD_BINDINGS_FIELDS_H
#define LATEWOOD_BINDINGS_FIELDS_H

#include "box.h"

#include <latewood/time.h>
#include <stddef.h>

typedef enum lw__lua_kind {
    FIELD_NUMBER, // double, finite
    FIELD_RANGE,  // double[2]: { lo, hi }
    FIELD_COUNT,  // int
    FIELD_LONG,   // int64_t
    FIELD_FLAG,   // int, from a boolean
    FIELD_CHOICE, // int: place in `words`
    FIELD_TEXT,   // const char *
    FIELD_PERIOD, // lw_period, from a time or a frequency
    FIELD_TICK,   // lw_tick
    FIELD_LIST,   // lw__lua_list
    FIELD_MATRIX, // lw__lua_matrix
    FIELD_TEXTS,  // lw__lua_texts
    FIELD_OTHER   // known; the constructor reads it itself
} lw__lua_kind;

typedef struct lw__lua_field {
    const char *name;
    lw__lua_kind kind;
    const char *unit; // of numbers: "s", "1" (no unit, or a percentage); NULL: any unit
    size_t offset;
    int required;
    const char *const *words; // of a choice, ends with NULL
} lw__lua_field;

// One line of a list of fields. A choice names its words, other fields that the constructor reads
// itself have no place in the struct.
#define REQUIRED(type, member, name, kind, unit)                                                   \
    {                                                                                              \
        name, kind, unit, offsetof(type, member), 1, NULL                                          \
    }
#define OPTIONAL(type, member, name, kind, unit)                                                   \
    {                                                                                              \
        name, kind, unit, offsetof(type, member), 0, NULL                                          \
    }
#define CHOICE(type, member, name, words)                                                          \
    {                                                                                              \
        name, FIELD_CHOICE, NULL, offsetof(type, member), 0, words                                 \
    }
#define OTHER(name)                                                                                \
    {                                                                                              \
        name, FIELD_OTHER, NULL, 0, 0, NULL                                                        \
    }

typedef struct lw__lua_list {
    int n;
    double *v;
} lw__lua_list;

typedef struct lw__lua_matrix {
    int stated, n_rows, n_columns;
    double *v; // row-major
} lw__lua_matrix;

typedef struct lw__lua_texts {
    int n;
    const char **v; // NULL where not stated
} lw__lua_texts;

// A table under reading.
typedef struct lw__lua_reader {
    lua_State *L;
    int table;           // its index
    const char *origin;  // "mount.lua:14"
    const char *subject; // `adc "current"`
} lw__lua_reader;

// Begin with the table at `index`; `what` in words ("adc"). With `named`, its first element is the
// name, returned and made part of the subject.
lw__lua_reader lw__lua_read(lua_State *L, int index, const char *what);
// For functions with arguments in place of a table; further ones are dropped, missing ones nil.
lw__lua_reader lw__lua_arguments(lua_State *L, const char *what, int n_arguments);
const char *lw__lua_read_name(lw__lua_reader *r, const char *what);

// Read `n` fields into `def`. Other keys are errors, except 1..n_positional and `more` names.
void lw__lua_fields(lw__lua_reader *r, int n, const lw__lua_field *fields, int n_positional,
                    int n_more, const char *const *more, void *def);
#define LW__LUA_FIELDS(r, fields, n_positional, def)                                               \
    lw__lua_fields(r, (int)(sizeof(fields) / sizeof *(fields)), fields, n_positional, 0, NULL, def)

// Raise `words "key"` with the nearest of the known names, where the table has another key.
void lw__lua_refuse_unknown(const lw__lua_reader *r, const char *words, int n_positional,
                            int n_known, const char *const *known);

// Raise `origin: subject: message`, and what the engine said of `field`.
int lw__lua_bad(const lw__lua_reader *r, const char *format, ...);
int lw__lua_bad_field(const lw__lua_reader *r, const char *field, const lw_error *err);
// Raise that the value at `index` is not what `field` wants.
int lw__lua_bad_type(const lw__lua_reader *r, const char *field, int index, const char *wanted);

// Single values at a stack index, `field` for messages.
double lw__lua_number(const lw__lua_reader *r, const char *field, int index, const char *unit);
int64_t lw__lua_whole(const lw__lua_reader *r, const char *field, int index, int64_t lo,
                      int64_t hi);
const char *lw__lua_field_text(const lw__lua_reader *r, const char *field, int index);
lw_period lw__lua_period(const lw__lua_reader *r, const char *field, int index);
lw_tick lw__lua_tick(const lw__lua_reader *r, const char *field, int index);
lw__lua_list lw__lua_numbers(const lw__lua_reader *r, const char *field, int index,
                             const char *unit);
lw__lua_matrix lw__lua_rows(const lw__lua_reader *r, const char *field, int index);
lw__lua_texts lw__lua_names(const lw__lua_reader *r, const char *field, int index);
// Length of the plain list at `index`; raises where it is no table or has other keys.
int lw__lua_length(const lw__lua_reader *r, const char *field, int index, const char *wanted);

// Push field `name` of the table and return its type; pops it again where it is nil.
int lw__lua_push_field(const lw__lua_reader *r, const char *name);

// Seconds of a time, of samples or of a share of a period: "2 us", "50 %", "0.5 samples".
// period 0: shares are refused.
double lw__lua_time_or_share(const lw__lua_reader *r, const char *field, int index, double period);

// The timing at `index`; a time becomes a constant one, owned by a userdata on the stack.
const lw_timing *lw__lua_timing_at(const lw__lua_reader *r, const char *field, int index);

#endif
