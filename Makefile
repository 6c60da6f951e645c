# SPDX-License-Identifier: MIT
#
#   make            build/fescue and build/libfescue.a
#   make demo       fill the two demo tables
#   make check      every test of the ordinary suite; ends with "N passed, N failed"
#   make check-long the suites that take longer
#   make bench      measure, beside the limits of the machine: $(BUILD)/bench.json, and bench.png by gnuplot
#   make bench-shares     what two workers can give at most, by the processor clock of one
#   make bench-solvers    error against time of all solvers: $(BUILD)/solvers.csv, and solvers.png by gnuplot
#   make bench-recovery   tables recovered from few cells, and with noise: $(BUILD)/recovery.csv
#   make format     bring all sources into the one layout
#   make install    PREFIX=/usr/local: program, library, header, manual pages

CC ?= gcc
PREFIX ?= /usr/local
PYTHON ?= /usr/bin/python3
BUILD ?= build
SANITIZE ?=

WARNINGS = -Wall -Wextra -Wconversion -Wshadow -Wmissing-prototypes -Wstrict-prototypes -Wvla -Werror
CFLAGS = -std=c17 -O3 -g -D_GNU_SOURCE -pthread -fno-math-errno -ffp-contract=off $(WARNINGS) $(SANITIZE) \
         -Isrc -Isrc/include -I/usr/include/suitesparse $(EXTRA)
LIBS = -lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -linih -lsqlite3 -lisal -lz -lm -pthread

FOLDERS = base table numeric manifold model solve judge write job night
LIBRARY_SOURCES = $(foreach f,$(FOLDERS),$(wildcard src/$(f)/*.c))
PROGRAM_SOURCES = $(wildcard src/cli/*.c)
UNIT_SOURCES = $(wildcard tests/unit/test_*.c)
SUPPORT_SOURCES = $(wildcard tests/unit/support*.c)
FAULT_SOURCES = $(wildcard tests/fault/test_*.c)
BENCH_SOURCES = $(wildcard tests/bench/bench_*.c)
BENCH_PARTS = $(filter-out $(BENCH_SOURCES),$(wildcard tests/bench/*.c))
MANUALS = $(wildcard src/man/*.1)
FORMATS = $(wildcard src/man/*.5)

object = $(patsubst %.c,$(BUILD)/%.o,$(1))
LIBRARY = $(BUILD)/libfescue.a
PROGRAM = $(BUILD)/fescue
SUPPORT = $(BUILD)/tests/unit/libsupport.a
BENCH_LIBRARY = $(BUILD)/tests/bench/libbench.a
BENCHES = $(patsubst tests/%.c,$(BUILD)/tests/%,$(BENCH_SOURCES))
UNIT_TESTS = $(patsubst tests/%.c,$(BUILD)/tests/%,$(UNIT_SOURCES) $(FAULT_SOURCES))

all: $(PROGRAM) $(LIBRARY)

$(BUILD)/%.o: %.c
	@mkdir -p $(@D)
	$(CC) $(CFLAGS) -MMD -MP -c $< -o $@

$(LIBRARY): $(call object,$(LIBRARY_SOURCES))
	rm -f $@
	ar rcs $@ $^

$(PROGRAM): $(call object,$(PROGRAM_SOURCES)) $(LIBRARY)
	$(CC) $(CFLAGS) $^ $(LIBS) -o $@

# An archive, so that a test takes only the helpers it uses, and with them only the folders they need.
$(SUPPORT): $(call object,$(SUPPORT_SOURCES))
	rm -f $@
	ar rcs $@ $^

$(UNIT_TESTS): $(BUILD)/tests/%: $(BUILD)/tests/%.o $(SUPPORT) $(LIBRARY)
	$(CC) $(CFLAGS) $^ -lcmocka $(LIBS) -o $@

$(BENCH_LIBRARY): $(call object,$(BENCH_PARTS))
	rm -f $@
	ar rcs $@ $^

$(BENCHES): $(BUILD)/tests/bench/%: $(BUILD)/tests/bench/%.o $(BENCH_LIBRARY) $(LIBRARY)
	$(CC) $(CFLAGS) $^ $(LIBS) $(WRAPPED) -o $@

# Calls for work go through the program that measures them.
$(BUILD)/tests/bench/bench_shares: WRAPPED = -Wl,--wrap=team_run

tests: $(UNIT_TESTS)

demo: all
	scripts/demo-tables

check: all tests
	PYTHON=$(PYTHON) BUILD=$(BUILD) CC="$(CC)" tests/run check

check-long: all tests
	PYTHON=$(PYTHON) BUILD=$(BUILD) CC="$(CC)" tests/run long

# What is measured, and on tables of which sizes: see tests/bench/bench_fescue.c.
bench: all $(BUILD)/tests/bench/bench_fescue $(BUILD)/tests/bench/bench_streams
	BUILD=$(BUILD) PYTHON=$(PYTHON) $(BUILD)/tests/bench/bench_fescue
	BUILD=$(BUILD) $(BUILD)/tests/bench/bench_streams

bench-shares: $(BUILD)/tests/bench/bench_shares
	$<

bench-recovery: $(BUILD)/tests/bench/bench_recovery
	$< 20 all $(BUILD)/recovery.csv

bench-solvers: $(BUILD)/tests/bench/bench_solvers
	$< $(BUILD)/solvers.csv; met=$$?; if command -v gnuplot >/dev/null; then \
	gnuplot -e "table='$(BUILD)/solvers.csv'; chart='$(BUILD)/solvers.png'" tests/bench/solvers.gnuplot; fi; exit $$met

format:
	clang-format -i $(shell git ls-files --cached --others --exclude-standard '*.c' '*.h')

install: all
	install -d $(DESTDIR)$(PREFIX)/bin $(DESTDIR)$(PREFIX)/lib $(DESTDIR)$(PREFIX)/include $(DESTDIR)$(PREFIX)/share/man/man1 \
	        $(DESTDIR)$(PREFIX)/share/man/man5
	install $(PROGRAM) $(DESTDIR)$(PREFIX)/bin
	install -m 644 $(LIBRARY) $(DESTDIR)$(PREFIX)/lib
	install -m 644 src/include/fescue.h src/include/fescue_options.def src/include/fescue_sow_options.def \
	    src/include/fescue_night_options.def $(DESTDIR)$(PREFIX)/include
	install -m 644 $(MANUALS) $(DESTDIR)$(PREFIX)/share/man/man1
	install -m 644 $(FORMATS) $(DESTDIR)$(PREFIX)/share/man/man5

clean:
	rm -rf $(BUILD)

.PHONY: all tests demo check check-long bench bench-recovery bench-shares bench-solvers format install clean
.SECONDARY:
-include $(shell find $(BUILD) -name '*.d' 2>/dev/null)
