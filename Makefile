#: Targets:
#:   all          library, Lua module and program, in build/ (the default)
#:   demo         run the example study and show what it says
#:   check        build, run every test, check layers and words
#:   check-long   check, and the tests that take minutes
#:   bench        measure speed against reference code, in one run
#:   sanitize     run the tests with address, leak and undefined-behaviour checks
#:   lint         formatting, shell and Lua style, a build with clang
#:   format       lay the C code out with clang-format
#:   install      into $(DESTDIR)$(PREFIX); uninstall takes it away again
#:   clean        remove build/
#:
#: Variables (make NAME=value):
#:   CC, CFLAGS, LDFLAGS   compiler (gcc or clang) and options of your own
#:   WERROR                empty lets warnings pass
#:   TESTS                 the tests that check runs, e.g. TESTS=tests/test_time.c
#:   PREFIX, LIBDIR        where to install; /usr/local and $(PREFIX)/lib unless stated
#:   DESTDIR               put before every path while installing
#:
#: What is missing on Debian is installed first, by name; on other systems it is only named.
#: All cores are used unless -j says otherwise. make --trace shows each command.

VERSION := 0.1.0
ABI := 0

PREFIX ?= /usr/local
LIBDIR ?= $(PREFIX)/lib
WERROR ?= -Werror
CFLAGS ?= -O3
# Where everything is built. The sanitized and the clang build use a folder below it.
B ?= build

ifeq ($(MAKELEVEL),0)
MAKEFLAGS += -j$(shell nproc 2>/dev/null || echo 2)
endif
.DELETE_ON_ERROR:
.SUFFIXES:
.PHONY: all demo check check-long bench sanitize lint format install uninstall clean help
.PHONY: check-layers check-words run-tests run-long-tests setup-long test-programs FORCE
all:

# ---- what this machine has (flags of the libraries), seen to before anything is built

goals := $(or $(MAKECMDGOALS),all)
ifneq ($(filter-out help clean uninstall format check-layers check-words,$(goals)),)
include build/config.mk
endif
ifneq ($(filter check check-long bench sanitize lint run-% test-programs $(B)/tests/%,$(goals)),)
include build/config-tests.mk
endif

build/config.mk: FORCE
	@$(call keep_if_same,CC="$(CC)" scripts/setup.sh build,$@)
build/config-tests.mk: FORCE | build/config.mk
	@$(call keep_if_same,CC="$(CC)" scripts/setup.sh tests,$@)

# Write a command's output to a file, leaving the file alone if it would not change.
define keep_if_same
mkdir -p $(dir $2); $1 > $2.new || { rm -f $2.new; exit 1; }; \
if cmp -s $2.new $2; then rm $2.new; else mv $2.new $2; fi
endef

# ---- sources

engine_sources := $(sort $(wildcard engine/*/*.c))
program_sources := $(sort $(wildcard bindings/program*.c))
module_sources := $(filter-out $(program_sources),$(sort $(wildcard bindings/*.c)))
shipped_lua := $(sort $(wildcard scripts/latewood/*.lua scripts/latewood/*/*.lua))
bench_sources := $(sort $(wildcard tests/bench_*.c))
long_sources := $(sort $(wildcard tests/long_*.c))
support_sources := $(filter-out tests/test_% tests/bench_% tests/long_%,$(wildcard tests/*.c))
TESTS ?= $(sort $(wildcard tests/test_*.c tests/test_*.lua tests/test_*.sh))
LONG_TESTS ?= $(sort $(wildcard tests/long_*.c tests/long_*.lua tests/long_*.sh))

engine_objects := $(engine_sources:%.c=$(B)/%.o)
module_objects := $(module_sources:%.c=$(B)/%.o)
program_objects := $(program_sources:%.c=$(B)/%.o)
support_objects := $(support_sources:%.c=$(B)/%.o)
test_programs := $(patsubst %.c,$(B)/%,$(filter %.c,$(TESTS)))
long_programs := $(patsubst %.c,$(B)/%,$(filter %.c,$(LONG_TESTS)))
bench_programs := $(bench_sources:%.c=$(B)/%)

library := $(B)/liblatewood.a
shared := $(B)/liblatewood.so
program := $(if $(program_sources),$(B)/latewood)
module := $(if $(module_sources),$(B)/lua/latewood.so)

# ---- compiling

# Value-safe optimisation only: no contraction, no fast-math, so results are the same everywhere.
numerics := -fno-math-errno -fno-trapping-math -ffp-contract=off
warnings := -Wall -Wextra -Wpedantic -Wconversion -Wshadow -Wstrict-prototypes \
            -Wmissing-prototypes $(WERROR)
ifdef SANITIZE
sanitizers := -fsanitize=address,undefined -fno-sanitize-recover=all -fno-omit-frame-pointer
else
no_undefined := -Wl,-z,defs
endif
common := -std=c17 $(CFLAGS) $(numerics) -fPIC -fno-semantic-interposition $(warnings) \
          -ffile-prefix-map="$(CURDIR)"=. -pthread $(sanitizers)

# The libraries' headers count as the system's: their warnings are not ours.
as_system = $(patsubst -I%,-isystem %,$1)
libraries_cflags = $(call as_system,$(GSL_CFLAGS) $(SLEEF_CFLAGS) $(SQLITE_CFLAGS))
uses_sqlite := $(shell grep -rlsE '^ *\# *include *<sqlite3\.h>' engine)
libraries = -Wl,--as-needed $(GSL_LIBS) $(SLEEF_LIBS) $(if $(uses_sqlite),$(SQLITE_LIBS)) -lm

engine_flags = $(common) -D_XOPEN_SOURCE=700 -fvisibility=hidden -DLW_SHARED -Iengine/include -Iengine \
               $(libraries_cflags)
binding_flags = $(common) -D_POSIX_C_SOURCE=200809L -DLATEWOOD_VERSION='"$(VERSION)"' \
                -Iengine/include $(call as_system,$(LUA_CFLAGS))
test_flags = $(common) -D_XOPEN_SOURCE=700 -Iengine/include -Iengine -Itests \
             $(libraries_cflags) $(call as_system,$(CHECK_CFLAGS))
link = $(CC) $(CFLAGS) $(sanitizers) -pthread $(LDFLAGS)

# Compiled again when the compiler or a flag changes.
$(B)/flags: FORCE
	@$(call keep_if_same,printf '%s\n' $(call quoted,$(CC) $(CPPFLAGS) $(engine_flags) \
	  $(binding_flags) $(LDFLAGS)) $(call quoted,$(libraries)),$@)
quoted = '$(subst ','\'',$1)'

define compile
@mkdir -p $(@D)
@echo "compile $<"
@$(CC) $(CPPFLAGS) $1 -MMD -MP -c -o $@ $<
endef

$(B)/engine/%.o: engine/%.c $(B)/flags
	$(call compile,$(engine_flags))
$(B)/bindings/%.o: bindings/%.c $(B)/flags
	$(call compile,$(binding_flags))
$(B)/tests/%.o: tests/%.c $(B)/flags
	$(call compile,$(test_flags))
$(B)/generated/%.o: $(B)/generated/%.c $(B)/flags
	$(call compile,$(binding_flags) -Ibindings)

-include $(wildcard $(B)/engine/*/*.d $(B)/bindings/*.d $(B)/tests/*.d $(B)/generated/*.d)

# ---- library, module, program

# Linked again also when a source was taken away.
$(B)/sources: FORCE
	@$(call keep_if_same,printf '%s\n' $(engine_sources) - $(module_sources) - \
	  $(program_sources) - $(support_sources),$@)

$(library): $(engine_objects) $(B)/sources
	@echo "archive $@"
	@rm -f $@
	@$(AR) rcsD $@ $(engine_objects)

$(shared): $(engine_objects) $(B)/sources scripts/latewood.map
	@echo "link $@"
	@$(link) -shared $(no_undefined) -Wl,-soname,$(@F).$(ABI) \
	  -Wl,--version-script=scripts/latewood.map -o $@ $(engine_objects) $(libraries)
	@ln -sf $(@F) $@.$(ABI)

# Holds the engine but not Lua: the interpreter that loads it brings that.
$(B)/lua/latewood.so: $(module_objects) $(library) scripts/module.map
	@echo "link $@"
	@mkdir -p $(@D)
	@$(link) -shared -Wl,--version-script=scripts/module.map -o $@ $(module_objects) $(library) \
	  $(libraries)

$(B)/latewood: $(program_objects) $(module_objects) $(B)/generated/shipped.o $(library)
	@echo "link $@"
	@$(link) -o $@ $(program_objects) $(module_objects) $(B)/generated/shipped.o $(library) \
	  $(libraries) $(LUA_LIBS)

$(B)/generated/shipped.c: scripts/embed.sh $(B)/shipped $(shipped_lua)
	@echo "embed scripts/latewood"
	@mkdir -p $(@D)
	@scripts/embed.sh scripts $(shipped_lua) > $@
$(B)/shipped: FORCE
	@$(call keep_if_same,printf '%s\n' $(shipped_lua),$@)

all: $(if $(engine_sources),$(library) $(shared)) $(module) $(program)

# ---- tests, measurements, the demo

$(B)/tests/support.a: $(support_objects) $(B)/sources
	@mkdir -p $(@D)
	@rm -f $@
	@$(AR) rcsD $@ $(support_objects)

$(B)/tests/%: $(B)/tests/%.o $(B)/tests/support.a $(library)
	@echo "link $@"
	@$(link) -o $@ $^ $(libraries) $(CHECK_LIBS)
# The one that calls Lua brings the module's objects and an interpreter.
$(B)/tests/bench_lua.o: test_flags += $(call as_system,$(LUA_CFLAGS))
$(B)/tests/bench_lua: $(B)/tests/bench_lua.o $(module_objects) $(library)
	@echo "link $@"
	@$(link) -o $@ $^ $(libraries) $(LUA_LIBS)
# Compiled once the library it compares with is there; without it, it says so.
$(long_programs:%=%.o): | setup-long
$(B)/tests/long_ode_sundials: private libraries += $(if $(shell test -e \
  /usr/include/cvode/cvode.h && echo yes),-lsundials_cvode -lsundials_nvecserial \
  -lsundials_sunmatrixdense -lsundials_sunlinsoldense)
.SECONDARY: $(test_programs:%=%.o) $(long_programs:%=%.o) $(bench_programs:%=%.o)

test-programs: $(test_programs)

# For the runner: where things are, and what a sanitized module needs in a plain interpreter.
runner = B="$(B)" LUA="$(LUA)" CC="$(CC)" \
         LUA_PRELOAD="$(if $(SANITIZE),$(shell $(CC) -print-file-name=libasan.so))" \
         scripts/run-tests.sh

run-tests: all $(test_programs)
	@$(runner) $(TESTS)
setup-long:
	@scripts/setup.sh long
run-long-tests: all $(long_programs) run-tests setup-long
	@$(runner) $(LONG_TESTS)

check-layers:
	@scripts/check-layers.sh --self-test
	@scripts/check-layers.sh
check-words:
	@scripts/check-words.sh --self-test
	@scripts/check-words.sh

check: run-tests check-layers check-words
check-long: check run-long-tests

bench: all $(bench_programs)
	@B="$(B)" LUA="$(LUA)" scripts/run-bench.sh $(bench_programs) $(wildcard tests/bench_*.lua)

sanitize:
	@$(MAKE) --no-print-directory B=build/sanitize SANITIZE=1 CFLAGS="-O1 -g" WERROR= \
	  TESTS="$(filter-out tests/test_install.sh,$(TESTS))" run-tests

demo: all
	@B="$(B)" scripts/demo.sh

# ---- upkeep

c_files = $(wildcard engine/*/*.[ch] engine/include/latewood/*.h bindings/*.[ch] tests/*.[ch] \
          scripts/*.[ch])
shell_files = $(wildcard scripts/*.sh tests/*.sh .ci/run)

lint: check-layers check-words
	@scripts/setup.sh lint
	@clang-format --dry-run -Werror $(c_files)
	@shellcheck -x $(shell_files)
	@luacheck -q .
	@$(MAKE) --no-print-directory B=build/clang CC=clang all test-programs

format:
	@clang-format -i $(c_files)

# ---- installing

installer = DESTDIR="$(DESTDIR)" PREFIX="$(PREFIX)" LIBDIR="$(LIBDIR)" VERSION="$(VERSION)" \
            ABI="$(ABI)" B="$(B)" REQUIRES="gsl sleef$(if $(uses_sqlite), sqlite3)" \
            scripts/install.sh

install: all
	@$(installer)
uninstall:
	@$(installer) --remove

clean:
	rm -rf build

help:
	@sed -n 's/^#: \{0,1\}//p' $(firstword $(MAKEFILE_LIST))
