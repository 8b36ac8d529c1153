// Sets of operations of more than one word: what becomes due in this pass and in the next one.
//
// Workload: rigs of more than 64 operations; a few words a set.
//
// Invariant
// 1. What becomes due at or before the operation at work waits for the next pass.

#include "run/state.h"

void lw__words_make_due(lw__pass *p, int op)
{
    uint64_t *words = op > p->op ? p->due_words : p->next_words;
    words[op >> 6] |= UINT64_C(1) << (op & 63);
}

void lw__words_make_all_due(lw__pass *p, const lw__set *set, int N)
{
    for (int w = 0; w < N && set->words != NULL; w++)
        for (uint64_t bits = set->words[w]; bits != 0; bits &= bits - 1)
            lw__words_make_due(p, w * 64 + __builtin_ctzll(bits));
}

void lw__words_tell(lw__pass *p, const lw__set *observers, int N)
{
    for (int w = 0; w < N && observers->words != NULL; w++)
        p->due_words[w] |= observers->words[w];
}
