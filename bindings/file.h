// Data files that a study names: where they are, and columns of numbers in them.
#ifndef LATEWOOD_BINDINGS_FILE_H
#define LATEWOOD_BINDINGS_FILE_H

#include "fields.h"

// The path to open for a path as the study wrote it, by the host's rule; on the stack. Raises
// where the host refuses.
const char *lw__lua_resolve(const lw__lua_reader *r, const char *field, const char *path);

// A column by its name in the header, or (name NULL) by its number from 1.
typedef struct lw__lua_column {
    const char *name;
    int number;
} lw__lua_column;

// How numbers are written; all zero: as usual.
typedef struct lw__lua_format {
    char decimal;   // ',' or '.'
    char separator; // 0: the first of tab, semicolon and comma that the first line has
    int quantities; // units may follow numbers
} lw__lua_format;

// Two columns of a text of comma-, semicolon- or tab-separated values. Blank lines and lines that
// begin with # or ; are skipped; a first line without numbers in the columns is a header. A column
// without name and with number 0 is not read: it counts the rows from 0.
void lw__lua_read_columns(const lw__lua_reader *r, const char *path,
                          const lw__lua_column columns[2], const lw__lua_format *format,
                          lw__lua_list out[2]);
// The column that a field of the table states, by name or number; it is required.
lw__lua_column lw__lua_column_field(const lw__lua_reader *r, const char *field);

void lw__lua_file_class(lua_State *L);

#endif
