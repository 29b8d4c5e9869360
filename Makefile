# Brink. `make help` lists what can be made. All output goes to build/.
#
# One set of rules, four variants of it: gcc (what is installed), clang, san (ASan + UBSan), fuzz.

PREFIX  ?= /usr/local
DESTDIR ?=
BUILD   := build
SHELL   := /bin/sh
.DELETE_ON_ERROR:
.SUFFIXES:
.DEFAULT_GOAL := all

# ---- what must be installed (Debian 12 names): the one list ----------------------------------
DEPS_BUILD := gcc libc6-dev pkg-config libsystemd-dev libudev-dev libserialport-dev libinih-dev \
              libjansson-dev liblapacke-dev
DEPS_CHECK := clang clang-format clang-tidy cppcheck valgrind mandoc libcmocka-dev libgsl-dev \
              libclang-rt-14-dev python3 python3-scipy strace systemd umockdev

# ---- flags ------------------------------------------------------------------------------------
WARN   := -Wall -Wextra -Wpedantic -Wshadow -Wconversion -Wdouble-promotion -Wstrict-prototypes \
          -Wmissing-prototypes -Wformat=2 -Werror
STD    := -std=c17 -D_GNU_SOURCE -ffp-contract=off -Isrc
HARD   := -D_FORTIFY_SOURCE=3 -fstack-protector-strong -fPIE
HARDLD := -pie -Wl,-z,relro,-z,now
COMMON := $(STD) $(WARN) -g -MMD -MP

CC_gcc       := gcc
CFLAGS_gcc   := $(COMMON) -O2 $(HARD)
LDFLAGS_gcc  := $(HARDLD)
CC_clang     := clang
CFLAGS_clang := $(COMMON) -O2 $(HARD)
LDFLAGS_clang := $(HARDLD)
SAN          := -fsanitize=address,undefined -fno-sanitize-recover=all -fno-omit-frame-pointer
CC_san       := gcc
CFLAGS_san   := $(COMMON) -O1 $(SAN)
LDFLAGS_san  := $(SAN)
CC_fuzz      := clang
CFLAGS_fuzz  := $(COMMON) -O1 -fsanitize=address,undefined,fuzzer-no-link -fno-sanitize-recover=all
LDFLAGS_fuzz := -fsanitize=address,undefined,fuzzer

# ---- layers: arrows point one way, right to left ------------------------------------------------
LAYERS    := util core decode gauge publish act
DAEMON_L  := act publish gauge decode core util
CLIENT_L  := util
BENCH_L   := decode core util
DAEMON_LD := -lsystemd -ludev -lserialport -linih -ljansson -lm
CLIENT_LD := -l:libjansson.a -lm
BENCH_LD  := -linih -llapacke -lm
TEST_LD   := -lcmocka -lgsl -lgslcblas -llapacke $(DAEMON_LD)

src_of = $(wildcard src/$(1)/*.c)
UNIT   := $(patsubst tests/unit/%.c,%,$(wildcard tests/unit/test_*.c))
FUZZ   := $(patsubst tests/fuzz/%.c,%,$(wildcard tests/fuzz/fuzz_*.c))
SYSTEM := $(wildcard tests/system/test_*)

# $(1) variant, $(2) layer
define LAYER
$(BUILD)/$(1)/lib$(2).a: $(patsubst src/%.c,$(BUILD)/$(1)/obj/%.o,$(call src_of,$(2)))
	@mkdir -p $$(@D)
	@rm -f $$@
	@ar rcs $$@ $$^
endef

# $(1) variant, $(2) program, $(3) its folder, $(4) layers, $(5) libraries, $(6) more link flags
define PROGRAM
$(BUILD)/$(1)/$(2): $(patsubst src/%.c,$(BUILD)/$(1)/obj/%.o,$(call src_of,$(3))) \
                    $(patsubst %,$(BUILD)/$(1)/lib%.a,$(4))
	@echo "link  $$@"
	@$(CC_$(1)) $(if $(filter -static-pie,$(6)),$(filter-out -pie,$(LDFLAGS_$(1))),$(LDFLAGS_$(1))) \
	    $(6) -o $$@ $$^ $(5)
endef

# $(1) variant. Tests link every layer and the daemon's, client's and bench's objects but main. P in
# ar: whole paths, so that client/x.o and bench/x.o are two members.
define VARIANT
$(BUILD)/$(1)/obj/%.o: src/%.c | $(if $(filter gcc,$(1)),deps,deps-check)
	@mkdir -p $$(@D)
	@echo "cc    $$@"
	@$(CC_$(1)) $(CFLAGS_$(1)) -c -o $$@ $$<
$(BUILD)/$(1)/tobj/%.o: tests/%.c | deps-check
	@mkdir -p $$(@D)
	@echo "cc    $$@"
	@$(CC_$(1)) $(CFLAGS_$(1)) -Itests -c -o $$@ $$<
$(BUILD)/$(1)/unit/%: $(BUILD)/$(1)/tobj/unit/%.o $(BUILD)/$(1)/libapps.a \
                      $(patsubst %,$(BUILD)/$(1)/lib%.a,$(DAEMON_L))
	@mkdir -p $$(@D)
	@$(CC_$(1)) $(LDFLAGS_$(1)) $$(TEST_WRAP) -o $$@ $$^ $(TEST_LD)
$(BUILD)/$(1)/unit/test_server: TEST_WRAP := -Wl,--wrap=malloc,--wrap=calloc
$(BUILD)/$(1)/libapps.a: $(patsubst src/%.c,$(BUILD)/$(1)/obj/%.o,$(filter-out %/main.c,$(foreach d,daemon client bench,$(call src_of,$(d)))))
	@mkdir -p $$(@D)
	@rm -f $$@
	@ar rcsP $$@ $$^
$(foreach l,$(LAYERS),$(eval $(call LAYER,$(1),$(l))))
$(eval $(call PROGRAM,$(1),brinkd,daemon,$(DAEMON_L),$(DAEMON_LD),))
$(eval $(call PROGRAM,$(1),brink,client,$(CLIENT_L),$(CLIENT_LD),$(if $(filter gcc clang,$(1)),-static-pie)))
$(eval $(call PROGRAM,$(1),brink-bench,bench,$(BENCH_L),$(BENCH_LD),))
.PHONY: programs-$(1) unit-$(1)
programs-$(1): $(patsubst %,$(BUILD)/$(1)/%,brinkd brink brink-bench)
unit-$(1): $(patsubst %,$(BUILD)/$(1)/unit/%,$(UNIT))
.SECONDARY:
endef
$(foreach v,gcc clang san fuzz,$(eval $(call VARIANT,$(v))))

$(BUILD)/fuzz/bin/%: $(BUILD)/fuzz/tobj/fuzz/%.o $(BUILD)/fuzz/libapps.a \
                     $(patsubst %,$(BUILD)/fuzz/lib%.a,$(DAEMON_L))
	@mkdir -p $(@D)
	@$(CC_fuzz) $(LDFLAGS_fuzz) -o $@ $^ $(DAEMON_LD)

-include $(shell find $(BUILD) -type f -name '*.d' 2>/dev/null)

# ---- targets ------------------------------------------------------------------------------------
.PHONY: all deps deps-check help demo check lint format sanitize memcheck bench accuracy fuzz vectors \
        install uninstall clean purity
## all         build the three programs (into build/gcc)
all: programs-gcc

## deps        install the Debian packages the build needs (prints the list where it may not)
deps:
	@tests/deps "$(BUILD)" build $(DEPS_BUILD)
deps-check: deps
	@tests/deps "$(BUILD)" check $(DEPS_CHECK)

## demo        install, build, and watch a simulated fen logger run down to its ordered stop
demo: all
	@tests/system/demo $(BUILD)/gcc

## check       install, build with GCC and clang, run every test
check: deps-check programs-gcc programs-clang unit-gcc unit-clang
	@tests/run $(BUILD)/gcc purity $(UNIT) -- $(SYSTEM)

## lint        clang-format, clang-tidy, cppcheck, mandoc -Tlint
lint: deps-check
	@tests/lint

## format      let clang-format lay out the sources
format: deps-check
	@clang-format -i $$(git ls-files 'src/*.[ch]' 'tests/*.[ch]')

## sanitize    run every test under ASan and UBSan
sanitize: deps-check programs-san unit-san
	@TEST_RUNS=100 tests/run $(BUILD)/san $(UNIT) -- $(SYSTEM)

## memcheck    run the unit tests and a daemon run under valgrind
memcheck: deps-check programs-gcc unit-gcc
	@TEST_RUNS=8 WRAP="valgrind -q --leak-check=full --error-exitcode=99 --exit-on-first-error=no" \
	    tests/run $(BUILD)/gcc $(UNIT) -- tests/system/test_daemon

## fuzz        every fuzz target for FUZZ_SECONDS (60) seconds
FUZZ_SECONDS ?= 60
fuzz: deps-check $(patsubst %,$(BUILD)/fuzz/bin/%,$(FUZZ))
	@tests/fuzz/run $(BUILD)/fuzz/bin $(FUZZ_SECONDS) $(FUZZ)

## bench       one table of costs: instructions, wake-ups, memory, start, answers a second
bench: deps-check programs-gcc
	@tests/bench/run $(BUILD)/gcc

## accuracy    how good charge and time left are on measured logs; must not fall back (ratchet)
accuracy: deps-check programs-gcc
	@tests/accuracy/run $(BUILD)/gcc

## vectors     make the reference vectors again with SciPy and compare them with what is kept
vectors: deps-check
	@tests/unit/vectors/make.sh

## install     into $(DESTDIR)$(PREFIX); /etc/brink.conf only when there is none
LIBDIR  = $(DESTDIR)$(PREFIX)/lib
MANDIR  = $(DESTDIR)$(PREFIX)/share/man
SHARE   = $(DESTDIR)$(PREFIX)/share/brink
UNITS  := brinkd.socket brink-poweroff.path brink-poweroff.service
MANUALS = $(foreach s,1 5 7 8,$(patsubst man/%,man$(s)/%,$(wildcard man/*.$(s))))
install: all
	install -d $(DESTDIR)$(PREFIX)/sbin $(DESTDIR)$(PREFIX)/bin $(SHARE)/cells $(DESTDIR)/etc \
	    $(LIBDIR)/systemd/system $(LIBDIR)/sysusers.d $(LIBDIR)/tmpfiles.d $(LIBDIR)/udev/rules.d
	install -m 755 $(BUILD)/gcc/brinkd $(DESTDIR)$(PREFIX)/sbin/
	install -m 755 $(BUILD)/gcc/brink $(BUILD)/gcc/brink-bench $(DESTDIR)$(PREFIX)/bin/
	install -m 644 conf/cells/*.ini $(SHARE)/cells/
	install -m 644 conf/brink.conf $(SHARE)/
	[ -e $(DESTDIR)/etc/brink.conf ] || install -m 644 conf/brink.conf $(DESTDIR)/etc/
	sed 's|@PREFIX@|$(PREFIX)|g' systemd/brinkd.service.in >$(LIBDIR)/systemd/system/brinkd.service
	chmod 644 $(LIBDIR)/systemd/system/brinkd.service
	install -m 644 $(addprefix systemd/,$(UNITS)) $(LIBDIR)/systemd/system/
	install -m 644 systemd/sysusers.d/brink.conf $(LIBDIR)/sysusers.d/
	install -m 644 systemd/tmpfiles.d/brink.conf $(LIBDIR)/tmpfiles.d/
	install -m 644 systemd/rules.d/70-brink.rules $(LIBDIR)/udev/rules.d/
	for page in $(MANUALS); do install -D -m 644 man/$${page#*/} $(MANDIR)/$$page || exit 1; done
	$(if $(filter /usr /usr/local,$(PREFIX)),,@echo "tables: add 'cells = $(PREFIX)/share/brink/cells' to [files] in /etc/brink.conf")
	@echo "next, as root: systemd-sysusers; systemd-tmpfiles --create; systemctl daemon-reload;"
	@echo "edit /etc/brink.conf; brinkd --verify; systemctl enable --now brinkd"

## uninstall   what install put there, except /etc/brink.conf
uninstall:
	rm -f $(DESTDIR)$(PREFIX)/sbin/brinkd $(DESTDIR)$(PREFIX)/bin/brink \
	    $(DESTDIR)$(PREFIX)/bin/brink-bench $(LIBDIR)/sysusers.d/brink.conf \
	    $(LIBDIR)/tmpfiles.d/brink.conf $(LIBDIR)/udev/rules.d/70-brink.rules \
	    $(addprefix $(LIBDIR)/systemd/system/,brinkd.service $(UNITS)) \
	    $(addprefix $(MANDIR)/,$(MANUALS))
	rm -rf $(SHARE)

## clean       remove build/
clean:
	rm -rf $(BUILD)

## help        this list
help:
	@echo "Brink: make TARGET"; sed -n 's/^## /  /p' Makefile
