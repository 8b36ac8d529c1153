// Uses of upvalues and globals in bytecode. See bytecode.h.
//
// The text that lua_dump writes is, for Lua 5.4:
//   header      1B "Lua" 54 00, 6 bytes, sizes of instruction, integer and number, one of each
//   byte        number of upvalues
//   function    source, first line, last line, parameters, vararg, stack (bytes),
//               code, constants, upvalues (in stack, index, kind), nested functions,
//               line differences, absolute lines, local variables, names of upvalues
// Counts are in base 128, high part first, the last byte marked by its top bit; a text is its
// length + 1 and its bytes, a missing text 0. An instruction has opcode (7 bits), A (8), k (1),
// B (8), C (8), low bits first.
//
// Invariants
// 1. Reading never passes the end; the first surprise stops it and is reported.
// 2. Recursion is as deep as functions are nested, at most MOST_NESTED.

#include "bytecode.h"

#include <lauxlib.h>
#include <stdint.h>
#include <string.h>

#define MOST_NESTED 220
#define N_REGISTERS 256

enum {
    OP_GETUPVAL = 9,  // R[A] := upvalue[B]
    OP_SETUPVAL = 10, // upvalue[B] := R[A]
    OP_GETTABUP = 11, // R[A] := upvalue[B][K[C]]
    OP_SETTABUP = 15, // upvalue[A][K[B]] := ...
    OP_SETTABLE = 16, // R[A][...] := ...
    OP_SETI = 17,
    OP_SETFIELD = 18 // R[A][K[B]] := ...
};

typedef struct reader {
    lua_State *L;
    const unsigned char *at, *end;
    int bad;
    int environment; // upvalue that holds the globals, -1
    void (*found)(void *context, const lw__lua_found *use);
    void *context;
} reader;

typedef struct text {
    const char *text;
    size_t n;
} text;

typedef struct function {
    const struct function *outer;
    const unsigned char *code, *upvalues, *lines;
    size_t n_code, n_upvalues, n_constants, n_lines, n_marks;
    text *constants;
    const unsigned char *marks; // absolute lines: pairs of counts
    size_t first_line;
} function;

// ---- pieces of the text

static const unsigned char *take(reader *r, size_t n)
{
    if (r->bad || n > (size_t)(r->end - r->at)) {
        r->bad = 1;
        return NULL;
    }
    const unsigned char *from = r->at;
    r->at += n;
    return from;
}

static size_t count(reader *r)
{
    size_t value = 0;
    for (int i = 0; i < 10; i++) {
        const unsigned char *byte = take(r, 1);
        if (byte == NULL)
            return 0;
        value = value << 7 | (*byte & 0x7F);
        if (*byte & 0x80)
            return value;
    }
    r->bad = 1;
    return 0;
}

static text take_text(reader *r)
{
    size_t n = count(r);
    if (n == 0)
        return (text){"?", 1};
    return (text){(const char *)take(r, n - 1), n - 1};
}

static void header(reader *r)
{
    static const unsigned char start[] = "\x1bLua\x54\x00\x19\x93\r\n\x1a\n";
    const unsigned char *h = take(r, sizeof start - 1 + 3);
    if (h == NULL || memcmp(h, start, sizeof start - 1) != 0 || h[12] != 4 ||
        h[13] != sizeof(lua_Integer) || h[14] != sizeof(lua_Number)) {
        r->bad = 1;
        return;
    }
    take(r, sizeof(lua_Integer) + sizeof(lua_Number) + 1);
}

static void constants(reader *r, function *f)
{
    f->n_constants = count(r);
    if (f->n_constants > (size_t)(r->end - r->at)) {
        r->bad = 1;
        return;
    }
    f->constants = lua_newuserdatauv(r->L, f->n_constants * sizeof *f->constants + 1, 0);
    for (size_t i = 0; i < f->n_constants && !r->bad; i++) {
        const unsigned char *tag = take(r, 1);
        f->constants[i] = (text){"?", 1};
        switch (tag != NULL ? *tag : 0) {
        case LUA_TNUMBER: // an integer
            take(r, sizeof(lua_Integer));
            break;
        case LUA_TNUMBER | 1 << 4:
            take(r, sizeof(lua_Number));
            break;
        case LUA_TSTRING:
        case LUA_TSTRING | 1 << 4: // a long one
            f->constants[i] = take_text(r);
            break;
        default: // nil, false, true have no more bytes
            break;
        }
    }
}

static void lines(reader *r, function *f)
{
    f->n_lines = count(r);
    f->lines = take(r, f->n_lines);
    f->n_marks = count(r);
    f->marks = r->at;
    for (size_t i = 0; i < f->n_marks && !r->bad; i++) {
        count(r);
        count(r);
    }
    size_t n_locals = count(r);
    for (size_t i = 0; i < n_locals && !r->bad; i++) {
        take_text(r);
        count(r);
        count(r);
    }
    size_t n_names = count(r);
    for (size_t i = 0; i < n_names && !r->bad; i++)
        take_text(r);
}

// ---- what the code does

static int line_of(const reader *r, const function *f, size_t pc)
{
    reader marks = *r;
    size_t line = f->first_line;
    if (f->n_lines <= pc)
        return 0;
    marks.at = f->marks;
    for (size_t i = 0; i <= pc; i++) {
        signed char step = (signed char)f->lines[i];
        if (step == -128) { // the line stands in the list of absolute ones
            count(&marks);
            line = count(&marks);
        } else {
            line += (size_t)step;
        }
    }
    return (int)line;
}

// The upvalue of the outermost function that upvalue i of `f` is; -1 where it is a local.
static int outermost(const function *f, size_t i)
{
    for (; f->outer != NULL; f = f->outer) {
        if (i >= f->n_upvalues || f->upvalues[3 * i])
            return -1;
        i = f->upvalues[3 * i + 1];
    }
    return (int)i;
}

static void tell(const reader *r, const function *f, size_t pc, lw__lua_use use, int upvalue,
                 size_t constant)
{
    text name = constant < f->n_constants ? f->constants[constant] : (text){"?", 1};
    lw__lua_found found = {use, upvalue + 1, name.text, name.n, line_of(r, f, pc)};
    r->found(r->context, &found);
}

static int is_environment(const reader *r, const function *f, size_t upvalue)
{
    return r->environment >= 0 && outermost(f, upvalue) == r->environment;
}

static int is_text(const function *f, size_t constant, const char *wanted)
{
    return constant < f->n_constants && f->constants[constant].n == strlen(wanted) &&
           memcmp(f->constants[constant].text, wanted, strlen(wanted)) == 0;
}

// `holds` says which registers hold the table of globals.
static void instruction(const reader *r, const function *f, size_t pc, unsigned char *holds)
{
    uint32_t i;
    memcpy(&i, f->code + 4 * pc, sizeof i);
    size_t a = i >> 7 & 0xFF, b = i >> 16 & 0xFF, c = i >> 24;
    switch (i & 0x7F) {
    case OP_SETUPVAL:
        if (outermost(f, b) >= 0)
            tell(r, f, pc, USE_SETS_UPVALUE, outermost(f, b), f->n_constants);
        break;
    case OP_SETTABUP:
        if (is_environment(r, f, a))
            tell(r, f, pc, USE_SETS_GLOBAL, -1, b);
        break;
    case OP_GETTABUP:
        holds[a] = is_environment(r, f, b) && is_text(f, c, "_G");
        if (is_environment(r, f, b))
            tell(r, f, pc, USE_GETS_GLOBAL, -1, c);
        break;
    case OP_GETUPVAL:
        holds[a] = (unsigned char)is_environment(r, f, b);
        break;
    case OP_SETFIELD:
        if (holds[a])
            tell(r, f, pc, USE_SETS_GLOBAL, -1, b);
        break;
    case OP_SETTABLE:
    case OP_SETI:
        if (holds[a])
            tell(r, f, pc, USE_SETS_GLOBAL, -1, f->n_constants);
        break;
    default:
        holds[a] = 0;
        break;
    }
}

static void read_function(reader *r, const function *outer, int depth)
{
    function f = {.outer = outer};
    unsigned char holds[N_REGISTERS] = {0};
    int top = lua_gettop(r->L);
    if (depth > MOST_NESTED || !lua_checkstack(r->L, 8))
        r->bad = 1;
    take_text(r);
    f.first_line = count(r);
    count(r);
    take(r, 3);
    f.n_code = count(r);
    f.code = f.n_code < (size_t)-1 / 4 ? take(r, 4 * f.n_code) : NULL;
    constants(r, &f);
    f.n_upvalues = count(r);
    f.upvalues = f.n_upvalues <= 255 ? take(r, 3 * f.n_upvalues) : NULL;
    size_t n_nested = count(r);
    for (size_t i = 0; i < n_nested && !r->bad; i++)
        read_function(r, &f, depth + 1);
    lines(r, &f);
    if (f.code == NULL || (f.upvalues == NULL && f.n_upvalues > 0))
        r->bad = 1;
    for (size_t pc = 0; pc < f.n_code && !r->bad; pc++)
        instruction(r, &f, pc, holds);
    lua_settop(r->L, top);
}

// ---- the text itself

typedef struct writer {
    int begun;
    luaL_Buffer buffer;
} writer;

// The buffer begins with the first piece: what it keeps on the stack is to stand above the
// function, which lua_dump takes from the top.
static int write_piece(lua_State *L, const void *piece, size_t n, void *context)
{
    writer *w = context;
    if (!w->begun)
        luaL_buffinit(L, &w->buffer);
    w->begun = 1;
    luaL_addlstring(&w->buffer, piece, n);
    return 0;
}

static int environment_of(lua_State *L, int index)
{
    const char *name;
    for (int i = 1; (name = lua_getupvalue(L, index, i)) != NULL; i++) {
        lua_pop(L, 1);
        if (strcmp(name, "_ENV") == 0)
            return i - 1;
    }
    return -1;
}

int lw__lua_scan(lua_State *L, int index, void (*found)(void *context, const lw__lua_found *use),
                 void *context)
{
    writer w;
    size_t n;
    index = lua_absindex(L, index);
    int top = lua_gettop(L);
    luaL_checkstack(L, 16, NULL);
    reader r = {
        .L = L, .environment = environment_of(L, index), .found = found, .context = context};
    w.begun = 0;
    lua_pushvalue(L, index);
    if (lua_dump(L, write_piece, &w, 0) != 0 || !w.begun)
        return 0;
    luaL_pushresult(&w.buffer);
    r.at = (const unsigned char *)lua_tolstring(L, -1, &n);
    r.end = r.at + n;
    header(&r);
    read_function(&r, NULL, 0);
    lua_settop(L, top);
    return !r.bad;
}
