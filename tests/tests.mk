# Tests that need more than the library: the tests' own helpers (tests/common), the built program
# (*_run.c), libraries to compare with. Included by the Makefile.
COMMON_OBJECTS = $(patsubst %.c,$(BUILD)/%.o,$(filter-out %_unit.c,$(wildcard tests/common/*.c)))
OUTSIDE_OBJECTS = $(patsubst %,$(BUILD)/tests/outside/%.o,plain_web plain_url reference witness)
RUN_SOURCES = $(wildcard tests/*/*_run.c)
RUNS = $(RUN_SOURCES:%.c=$(BUILD)/%)
HYPERLINKS = $(BUILD)/tests/outside/hyperlinks

# The helpers as an archive: a test takes what it uses.
$(BUILD)/tests/libcommon.a: $(COMMON_OBJECTS)
	@echo '  $@' && rm -f $@ && $(AR) rcs $@ $^

$(BUILD)/tests/outside/reference_unit: $(BUILD)/tests/outside/reference.o

$(BUILD)/tests/program/%_run: $(BUILD)/tests/program/%_run.o $(BUILD)/tests/libcommon.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ -lcmocka $(LIBRARIES)

$(BUILD)/tests/outside/%_run: $(BUILD)/tests/outside/%_run.o $(OUTSIDE_OBJECTS) $(BUILD)/tests/libcommon.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ -lcmocka $(shell pkg-config --libs igraph) $(LIBRARIES)

$(HYPERLINKS): $(HYPERLINKS).o $(BUILD)/tests/outside/reference.o $(BUILD)/tests/libcommon.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ $(shell pkg-config --libs gumbo)

# Everything that scripts/check runs.
runs: $(BUILD)/windrow $(BUILD)/crawlgen $(RUNS) $(HYPERLINKS)

.PHONY: runs

# Programs that measure, for scripts/bench.
BENCH_SOURCES = $(wildcard tests/bench/*_bench.c)
BENCHES = $(BENCH_SOURCES:%.c=$(BUILD)/%)

$(BUILD)/tests/bench/%_bench: $(BUILD)/tests/bench/%_bench.o $(BUILD)/tests/bench/bench.o $(BUILD)/libwindrow.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ $(LIBRARIES) $(BENCH_LIBRARIES)

$(BUILD)/tests/bench/igraph_bench: BENCH_LIBRARIES = $(shell pkg-config --libs igraph)

benches: $(BUILD)/windrow $(BUILD)/crawlgen $(BENCHES) $(HYPERLINKS)

.PHONY: benches
