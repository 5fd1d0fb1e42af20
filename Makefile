# make            build/flatgain, build/libflatgain.a, build/libflatgain.so
# make test       everything tests/run.sh runs (it also installs what is missing)
# make bench      speed figures as ratios in one run
# make install    PREFIX=/usr/local DESTDIR=, make uninstall
# Variants: make BUILD=build/asan SANITIZE=address,undefined
CC ?= cc
PREFIX ?= /usr/local
BUILD ?= build
OPT ?= -O2
WARN = -Wall -Wextra -Wpedantic -Wshadow -Wstrict-prototypes -Wmissing-prototypes -Wconversion -Wno-sign-conversion
WERROR ?=
PACKAGES = nlopt lapack blas yaml-0.1 libcjson
PKG_CFLAGS := $(shell pkg-config --cflags $(PACKAGES))
PKG_LIBS := $(shell pkg-config --libs $(PACKAGES)) -lm -lpthread -ldl
SAN = $(if $(SANITIZE),-fsanitize=$(SANITIZE) -fno-omit-frame-pointer -fno-sanitize-recover=all)
override CFLAGS += -std=c11 -D_GNU_SOURCE $(OPT) -g $(WARN) $(WERROR) $(SAN) -fPIC -fvisibility=hidden -Iinclude -Isrc $(PKG_CFLAGS) -MMD -MP
override LDFLAGS += $(SAN)

LIB_SRC := $(sort $(wildcard src/base/*.c src/linalg/*.c src/problem/*.c src/plant/*.c src/design/*.c src/assess/*.c src/write/*.c src/api/*.c))
CLI_SRC := $(sort $(wildcard src/cli/*.c))
LIB_OBJ := $(LIB_SRC:%.c=$(BUILD)/%.o)
CLI_OBJ := $(CLI_SRC:%.c=$(BUILD)/%.o)
TEST_SRC := $(sort $(wildcard tests/unit/test_*.c))
TESTS := $(TEST_SRC:tests/unit/%.c=$(BUILD)/tests/%)

.PHONY: all lib tests faults test bench install uninstall format clean
all: $(BUILD)/flatgain $(BUILD)/libflatgain.so
lib: $(BUILD)/libflatgain.a $(BUILD)/libflatgain.so
tests: $(TESTS)

$(BUILD)/%.o: %.c
	@mkdir -p $(@D)
	$(CC) $(CFLAGS) -c -o $@ $<

$(BUILD)/libflatgain.a: $(LIB_OBJ)
	@rm -f $@
	$(AR) rcs $@ $^

$(BUILD)/libflatgain.so: $(LIB_OBJ)
	$(CC) $(LDFLAGS) -shared -Wl,-soname,$(SONAME) -o $@ $^ $(PKG_LIBS)

$(BUILD)/flatgain: $(CLI_OBJ) $(BUILD)/libflatgain.a
	$(CC) $(LDFLAGS) -o $@ $(CLI_OBJ) $(BUILD)/libflatgain.a $(PKG_LIBS)

# Test programs: one per tests/unit/test_*.c; helpers in tests/unit/ that do not start with test_.
HELP_SRC := $(filter-out $(TEST_SRC),$(wildcard tests/unit/*.c))
HELP_OBJ := $(HELP_SRC:%.c=$(BUILD)/%.o)
$(BUILD)/tests/%: $(BUILD)/tests/unit/%.o $(HELP_OBJ) $(BUILD)/libflatgain.a
	@mkdir -p $(@D)
	$(CC) $(LDFLAGS) -o $@ $< $(HELP_OBJ) $(BUILD)/libflatgain.a $(PKG_LIBS) -lslicot $(shell pkg-config --libs check) -lgfortran

# Fault tests: one program per tests/faults/test_*.c. test_memory is linked with a copy of the library whose
# calls that need memory or a thread go to tests/faults/allocations.c (by objcopy, not by the linker's --wrap, which
# would redirect those of Check as well), and where every piece of an arena is an allocation of its own.
FAULT_SRC := $(sort $(wildcard tests/faults/test_*.c))
FAULTS := $(FAULT_SRC:tests/faults/%.c=$(BUILD)/faults/%)
REDIRECT = malloc calloc realloc free strndup pthread_create nlopt_create yaml_parser_initialize yaml_parser_parse
CHECK_LIBS = $(shell pkg-config --libs check)
faults: $(FAULTS)
$(BUILD)/faults/libflatgain-refusing.a: $(BUILD)/libflatgain.a
	@mkdir -p $(@D)
	$(CC) $(CFLAGS) -DFG_ARENA_BLOCK=1 -c -o $(@D)/arena.o src/base/arena.c
	@cp $< $@
	$(AR) r $@ $(@D)/arena.o
	objcopy $(foreach name,$(REDIRECT),--redefine-sym $(name)=refusing_$(name)) $@
$(BUILD)/faults/test_memory: $(BUILD)/tests/faults/test_memory.o $(BUILD)/tests/faults/allocations.o $(BUILD)/faults/libflatgain-refusing.a
	$(CC) $(LDFLAGS) -o $@ $^ $(PKG_LIBS) $(CHECK_LIBS)
$(BUILD)/faults/%: $(BUILD)/tests/faults/%.o $(BUILD)/tests/faults/sane.o $(BUILD)/libflatgain.a
	@mkdir -p $(@D)
	$(CC) $(LDFLAGS) -o $@ $< $(BUILD)/tests/faults/sane.o $(BUILD)/libflatgain.a $(PKG_LIBS) $(CHECK_LIBS)

# Speed programs: tests/bench/bench_*.c, driven by tests/bench/run.sh.
BENCH := $(patsubst tests/bench/%.c,$(BUILD)/bench/%,$(sort $(wildcard tests/bench/bench_*.c)))
BENCH_HELP = $(BUILD)/tests/bench/random_problem.o $(BUILD)/tests/unit/plants.o $(BUILD)/tests/unit/cases.o
$(BUILD)/bench/%: $(BUILD)/tests/bench/%.o $(BENCH_HELP) $(BUILD)/libflatgain.a
	@mkdir -p $(@D)
	$(CC) $(LDFLAGS) -o $@ $< $(BENCH_HELP) $(BUILD)/libflatgain.a $(PKG_LIBS)
bench: $(BENCH)
	BUILD=$(BUILD) sh tests/bench/run.sh

test:
	sh tests/run.sh

# The library has no users yet whose binaries could break, so its interface is number 0.
SONAME = libflatgain.so.0
VERSION = $(shell sed -n 's/^\#define FLATGAIN_VERSION "\(.*\)"/\1/p' include/flatgain.h)
TO = $(DESTDIR)$(PREFIX)
install: $(BUILD)/flatgain $(BUILD)/libflatgain.a $(BUILD)/libflatgain.so
	install -d $(TO)/bin $(TO)/include $(TO)/lib/pkgconfig
	install -m 755 $(BUILD)/flatgain $(TO)/bin/flatgain
	install -m 644 include/flatgain.h $(TO)/include/flatgain.h
	install -m 644 $(BUILD)/libflatgain.a $(TO)/lib/libflatgain.a
	install -m 755 $(BUILD)/libflatgain.so $(TO)/lib/$(SONAME)
	ln -sf $(SONAME) $(TO)/lib/libflatgain.so
	sed 's|@PREFIX@|$(PREFIX)|; s|@VERSION@|$(VERSION)|; s|@LIBS@|$(PKG_LIBS)|' src/api/flatgain.pc.in >$(TO)/lib/pkgconfig/flatgain.pc
	chmod 644 $(TO)/lib/pkgconfig/flatgain.pc

uninstall:
	rm -f $(TO)/bin/flatgain $(TO)/include/flatgain.h $(TO)/lib/libflatgain.a $(TO)/lib/libflatgain.so \
		$(TO)/lib/$(SONAME) $(TO)/lib/pkgconfig/flatgain.pc

format:
	clang-format -i $(shell git ls-files '*.c' '*.h')

clean:
	rm -rf build

-include $(LIB_OBJ:.o=.d) $(CLI_OBJ:.o=.d) $(TEST_SRC:%.c=$(BUILD)/%.d) $(HELP_SRC:%.c=$(BUILD)/%.d) \
	$(FAULT_SRC:%.c=$(BUILD)/%.d)
