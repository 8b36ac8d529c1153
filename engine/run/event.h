// What can make operations of other things due, by name: the end of an adc's conversion, so far.
//
// A thing that is triggered keeps the event it waits for; a thing that triggers keeps the set of
// operations that its event makes due. Sets are filled when operations have their numbers.
#ifndef LATEWOOD_RUN_EVENT_H
#define LATEWOOD_RUN_EVENT_H

#include "run/freezer.h"

// Find what `field` of a thing names ("adc", "current", "after"). Failure says which names there
// are. The things that trigger must have been frozen before.
lw_status lw__event_find(lw__freezer *w, const char *origin, const char *what, const char *owner,
                         const char *field, const char *name, lw__event *out);
// The operations that the event makes due; NULL for LW__EVENT_NONE.
lw__set *lw__event_set(const lw_frozen *z, lw__event event);
// The clock behind an event: follows triggers back to a period, num 0 where there is none (events
// that are not periodic). A ring of triggers fails.
lw_status lw__event_period(lw__freezer *w, lw__event event, lw_period *out);

#endif
