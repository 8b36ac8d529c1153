// The `latewood` program: a Lua state with the shipped modules, and the few things of the outside
// world that they may ask for. What the commands do is written in scripts/latewood/command.lua.

#include "latewood_lua.h"
#include "program_batch.h"
#include "program_files.h"
#include "program_sandbox.h"

#include <errno.h>
#include <lauxlib.h>
#include <lualib.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#define EXIT_INTERNAL 70
#define EXIT_IO 74

// ---- what command.lua asks of its host

// load(path): the study file's value; or nil, message, exit code.
static int host_load(lua_State *L)
{
    const char *path = luaL_checkstring(L, 1);
    int code = lw__program_study(L, path);
    if (code == 0)
        return 1;
    lua_pushnil(L);
    lua_insert(L, -2);
    lua_pushinteger(L, code);
    return 3;
}

static int outcome(lua_State *L, int status, const char *why)
{
    if (status == 0) {
        lua_pushboolean(L, 1);
        return 1;
    }
    lua_pushnil(L);
    lua_pushstring(L, why);
    return 2;
}

// write(folder, file, text): true; or nil, message, exit code
static int host_write(lua_State *L)
{
    char why[700] = "";
    size_t n_bytes;
    const char *text = luaL_checklstring(L, 3, &n_bytes);
    int status = lw__program_write(luaL_checkstring(L, 1), luaL_checkstring(L, 2), text, n_bytes,
                                   why, sizeof why);
    lua_settop(L, 0);
    outcome(L, status, why);
    lua_pushinteger(L, status);
    return status == 0 ? 1 : 3;
}

// make_folder(path)
static int host_make_folder(lua_State *L)
{
    char why[700] = "";
    int status = lw__program_make_folder(luaL_checkstring(L, 1), why, sizeof why);
    return outcome(L, status, why);
}

// exists(path)
static int host_exists(lua_State *L)
{
    struct stat about;
    lua_pushboolean(L, lstat(luaL_checkstring(L, 1), &about) == 0);
    return 1;
}

static int put(lua_State *L, FILE *stream)
{
    size_t length;
    const char *text = luaL_checklstring(L, 1, &length);
    fwrite(text, 1, length, stream);
    return 0;
}

static int host_out(lua_State *L)
{
    put(L, stdout);
    fflush(stdout); // a fault shows when the program ends
    return 0;
}

static int host_err(lua_State *L)
{
    return put(L, stderr);
}

// again(): a new allowance of instructions, for the next stretch of the study
static int host_again(lua_State *L)
{
    lw__program_allow_again(L);
    return 0;
}

static const luaL_Reg host[] = {
    {"load", host_load},     {"write", host_write}, {"make_folder", host_make_folder},
    {"exists", host_exists}, {"out", host_out},     {"err", host_err},
    {"again", host_again},   {NULL, NULL}};

// ---- main

typedef struct command_line {
    int n;
    char **arguments;
} command_line;

// Whether a stream is a terminal on which a line can be written over.
static int is_terminal(int stream)
{
    const char *terminal = getenv("TERM");
    return isatty(stream) && terminal != NULL && strcmp(terminal, "dumb") != 0;
}

static int takes_colour(int stream)
{
    const char *plain = getenv("NO_COLOR");
    return is_terminal(stream) && (plain == NULL || plain[0] == 0);
}

// command.main(arguments, host): leaves the exit code.
static int run_command(lua_State *L)
{
    const command_line *line = lua_touserdata(L, 1);
    lw__program_open(L);
    lua_getglobal(L, "require");
    lua_pushliteral(L, "latewood.command");
    lua_call(L, 1, 1);
    lua_getfield(L, -1, "main");
    lua_createtable(L, line->n, 0);
    for (int i = 1; i < line->n; i++) {
        lua_pushstring(L, line->arguments[i]);
        lua_rawseti(L, -2, i);
    }
    luaL_newlib(L, host);
    lw__program_batch(L);
    lua_pushboolean(L, takes_colour(STDOUT_FILENO));
    lua_setfield(L, -2, "colour");
    lua_pushboolean(L, is_terminal(STDERR_FILENO));
    lua_setfield(L, -2, "progress");
    lua_call(L, 2, 1);
    return 1;
}

static int run_protected(lua_State *L, command_line *line)
{
    lua_pushcfunction(L, run_command);
    lua_pushlightuserdata(L, line);
    int status = lua_pcall(L, 1, 1, 0);
    if (status == LUA_OK)
        return (int)lua_tointeger(L, -1);
    const char *message = lua_tostring(L, -1);
    fprintf(stderr, "latewood: %s\n", message != NULL ? message : "an error without a message");
    return status == LUA_ERRMEM || lw__program_exhausted(L) ? 65 : EXIT_INTERNAL;
}

int main(int n_arguments, char **arguments)
{
    lw__budget budget = {0};
    command_line line = {n_arguments, arguments};
    signal(SIGPIPE, SIG_IGN); // a closed pipe shows when output is flushed, without noise
    lua_State *L = lua_newstate(lw__program_allocate, &budget);
    if (L == NULL) {
        fputs("latewood: no memory to begin\n", stderr);
        return EXIT_INTERNAL;
    }
    int code = run_protected(L, &line);
    lua_close(L);
    int broken = fflush(stdout) != 0 || ferror(stdout);
    if (broken && errno == EPIPE)
        return 128 + SIGPIPE;
    if (broken) {
        fputs("latewood: standard output cannot be written\n", stderr);
        return EXIT_IO;
    }
    return code;
}
