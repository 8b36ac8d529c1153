// Batches for the program: crews, ledgers and their statistics as the shipped modules use them.
#ifndef LATEWOOD_BINDINGS_PROGRAM_BATCH_H
#define LATEWOOD_BINDINGS_PROGRAM_BATCH_H

#include <lua.h>

// Add to the host table on top of the stack:
//
// ledger(mode, def)  mode "create", "resume" or "open" (def.path); a ledger, or nil, message, name
//   of the status. def: path (absent: in memory), facts = { { section, name, value }, ... },
//   metrics = { { name, unit }, ... }, limits = { { name, metric, limit, "at most" | "at least" |
//   "defined" }, ... }, keep = "all", "failures" or "counts". methods  point(number, name, text),
//   commit(), provenance(name, value): true, or nil, message,
//            name; done(point, block): mask; tally(point, name); kept(); facts(), points(),
//            metrics(): lists; ended(point, most): list of { run, instant, text };
//            row(point, run): status, instant, text, values; column(point, metric): a sample
//            (statistics.h); close()
// crew { jobs, values, compute }  starts the processes; compute(point, run) returns status (0:
//   reached its end), instant, text and the values. A crew, or nil, message, name.
//   methods  work(ledger, next, finished, pause): "done" or "stopped", or nil, message, name;
//            next() gives point, block, mask or nil; finished(point, block) and pause() stop by
//            true; lost(); close()
// inputs()  what the study is made of: list of { "study", "module" or "data", name, text ("sha256
//   ..." of data), hash }
// clock(): seconds of a clock that only goes on; date(): now, ISO 8601; cores()
// catch(), release(), interrupted()  number of the signal that asks to stop, from catch() on until release()
void lw__program_batch(lua_State *L);

#endif
