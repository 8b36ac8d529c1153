// Status codes, messages, nearest names.

#include <latewood/status.h>

#include "base/text.h"

#include <stdio.h>
#include <string.h>

const char *lw_status_name(lw_status status)
{
    switch (status) {
#define NAME_CASE(name, value, text)                                                               \
    case name:                                                                                     \
        return #name;
        LW_STATUS_LIST(NAME_CASE)
#undef NAME_CASE
    }
    return "LW_ERR_UNKNOWN";
}

const char *lw_status_text(lw_status status)
{
    switch (status) {
#define TEXT_CASE(name, value, text)                                                               \
    case name:                                                                                     \
        return text;
        LW_STATUS_LIST(TEXT_CASE)
#undef TEXT_CASE
    }
    return "a status this library does not know";
}

// Copy with truncation at a character boundary. What is no UTF-8, such as a character of which a
// precision in the format left the first byte only, becomes question marks.
static void keep(lw_error *err, const char *text)
{
    size_t length = strlen(text);
    if (length >= LW_ERROR_TEXT)
        length = lw__utf8_cut(text, LW_ERROR_TEXT - 1);
    memcpy(err->text, text, length);
    err->text[length] = 0;
    for (size_t i = 0; i < length;) {
        size_t size = lw__utf8_character(err->text + i, length - i);
        if (size == 0)
            err->text[i] = '?';
        i += size > 0 ? size : 1;
    }
}

lw_status lw_error_set(lw_error *err, lw_status status, const char *format, ...)
{
    if (err == NULL)
        return status;
    char text[2 * LW_ERROR_TEXT];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    keep(err, text);
    err->status = status;
    return status;
}

void lw_error_prefix(lw_error *err, const char *format, ...)
{
    if (err == NULL)
        return;
    char text[2 * LW_ERROR_TEXT];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, LW_ERROR_TEXT, format, arguments);
    va_end(arguments);
    strncat(text, err->text, sizeof text - strlen(text) - 1);
    keep(err, text);
}

// ---- nearest name

#define LONGEST 64

static int least(int a, int b, int c)
{
    int m = a < b ? a : b;
    return m < c ? m : c;
}

// Optimal string alignment: insertions, deletions, substitutions, neighbours swapped.
// Method: F. Damerau, Comm. ACM 7 (1964) 171-176, restricted form. Long names are cut.
static int distance(const char *a, const char *b)
{
    int rows[3][LONGEST + 1];
    int n = (int)strlen(a), m = (int)strlen(b);
    n = n > LONGEST ? LONGEST : n;
    m = m > LONGEST ? LONGEST : m;
    for (int j = 0; j <= m; j++)
        rows[0][j] = j;
    for (int i = 1; i <= n; i++) {
        int *now = rows[i % 3], *last = rows[(i + 2) % 3], *before = rows[(i + 1) % 3];
        now[0] = i;
        for (int j = 1; j <= m; j++) {
            int differs = a[i - 1] != b[j - 1];
            now[j] = least(last[j] + 1, now[j - 1] + 1, last[j - 1] + differs);
            if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1])
                now[j] = least(now[j], before[j - 2] + 1, now[j]);
        }
    }
    return rows[n % 3][m];
}

const char *lw_nearest_name(const char *name, const char *const *names, int n)
{
    const char *nearest = NULL;
    size_t length = strlen(name) < LONGEST ? strlen(name) : LONGEST; // what `distance` looks at
    int best = (int)(length + 2) / 3 + 1; // a slip touches less than a third of the letters
    for (int i = 0; i < n; i++) {
        int d = distance(name, names[i]);
        if (d < best) {
            best = d;
            nearest = names[i];
        }
    }
    return nearest;
}
