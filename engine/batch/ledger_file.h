// What the parts of the ledger share: the open database and its statements.
#ifndef LATEWOOD_BATCH_LEDGER_FILE_H
#define LATEWOOD_BATCH_LEDGER_FILE_H

#include <latewood/ledger.h>
#include <sqlite3.h>

#define LW__LEDGER_MARK 0x4c574c47 // application id of the file
#define LW__LEDGER_VERSION 1
#define LW__LEDGER_TEXT 240 // bytes of a name in a message

struct lw_ledger {
    sqlite3 *db;
    char *path;
    int n_metrics, n_limits, writing;
    lw_keep keep;
    lw_ledger_limit *limits; // names are copies
    sqlite3_stmt *add, *find, *ended, *mark, *look, *count;
    // what was added of one point and block, not yet in the file
    int64_t point, block, n_runs, n_ended, *n_missed;
    uint64_t mask, before;
    int pending;
};

// Set err from the state of the database; `doing` says what failed.
lw_status lw__ledger_fault(const lw_ledger *ledger, lw_error *err, const char *doing);
// Run statements without results.
lw_status lw__ledger_do(lw_ledger *ledger, lw_error *err, const char *sql);
// Prepare a statement; the caller finalises it.
lw_status lw__ledger_prepare(lw_ledger *ledger, lw_error *err, const char *sql, sqlite3_stmt **out);
// One integer, from the first column of the first row.
lw_status lw__ledger_number(lw_ledger *ledger, lw_error *err, const char *sql, int64_t *out);

// The open database of a path, before anything of it is believed. flags: those of SQLite.
lw_status lw__ledger_connect(const char *path, int flags, lw_ledger **out, lw_error *err);
// Whether the file is a ledger, whole, and laid out as this version lays it out.
lw_status lw__ledger_verify(lw_ledger *ledger, lw_error *err);
// Write the tables and what they begin with.
lw_status lw__ledger_lay_out(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err);
// LW_OK if the ledger was made for `def`; else the first difference in words.
lw_status lw__ledger_same(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err);

#endif
