// Checks of text: UTF-8 and names.

#include "base/text.h"

#include <string.h>

#define NAME_MAX_BYTES 200

size_t lw__utf8_character(const char *text, size_t n)
{
    const unsigned char *s = (const unsigned char *)text;
    if (s[0] < 0x80)
        return 1;
    size_t length = s[0] >= 0xF0 ? 4 : s[0] >= 0xE0 ? 3 : 2;
    if (s[0] < 0xC2 || s[0] > 0xF4 || length > n)
        return 0;
    for (size_t i = 1; i < length; i++)
        if ((s[i] & 0xC0) != 0x80)
            return 0;
    int overlong = (s[0] == 0xE0 && s[1] < 0xA0) || (s[0] == 0xF0 && s[1] < 0x90);
    int surrogate = s[0] == 0xED && s[1] > 0x9F;
    int too_high = s[0] == 0xF4 && s[1] > 0x8F;
    return overlong || surrogate || too_high ? 0 : length;
}

int lw__utf8_valid(const char *s, size_t n)
{
    for (size_t i = 0; i < n;) {
        size_t length = lw__utf8_character(s + i, n - i);
        if (length == 0)
            return 0;
        i += length;
    }
    return 1;
}

size_t lw__utf8_cut(const char *s, size_t n)
{
    while (n > 0 && ((unsigned char)s[n] & 0xC0) == 0x80)
        n--;
    return n;
}

static int has_control(const char *name)
{
    for (const unsigned char *c = (const unsigned char *)name; *c != 0; c++)
        if (*c < 0x20 || *c == 0x7F || (*c == 0xC2 && c[1] >= 0x80 && c[1] < 0xA0))
            return 1;
    return 0;
}

lw_status lw__name_check(const char *what, const char *name, int allow_dot, lw_error *err)
{
    size_t length = name != NULL ? strlen(name) : 0;
    if (length == 0)
        return lw_error_set(err, LW_ERR_NAME, "%s: the name is missing or empty", what);
    if (!lw__utf8_valid(name, length))
        return lw_error_set(err, LW_ERR_NAME, "%s: the name is not valid UTF-8", what);
    if (length > NAME_MAX_BYTES)
        return lw_error_set(err, LW_ERR_NAME,
                            "%s \"%.40s...\": the name has %zu bytes; permitted 1 to %d", what,
                            name, length, NAME_MAX_BYTES);
    if (has_control(name))
        return lw_error_set(err, LW_ERR_NAME, "%s: the name holds a control character", what);
    if (!allow_dot && strchr(name, '.') != NULL)
        return lw_error_set(err, LW_ERR_NAME,
                            "%s \"%s\": a name holds no dot; dots part a thing from its signals",
                            what, name);
    return LW_OK;
}
