# Tests that need more than the library: the tests' own helpers (tests/common), the built program
# (*_run.c), libraries to compare with. Included by the Makefile.
COMMON_OBJECTS = $(patsubst %.c,$(BUILD)/%.o,$(filter-out %_unit.c,$(wildcard tests/common/*.c)))
OUTSIDE_OBJECTS = $(patsubst %,$(BUILD)/tests/outside/%.o,plain_web plain_url reference witness)
RUN_SOURCES = $(wildcard tests/*/*_run.c)
RUNS = $(RUN_SOURCES:%.c=$(BUILD)/%)
HYPERLINKS = $(BUILD)/tests/outside/hyperlinks

# Units that use a helper name it here; the Makefile's rule links it.
$(BUILD)/tests/common/oracle_unit: $(COMMON_OBJECTS)
$(BUILD)/tests/outside/reference_unit: $(BUILD)/tests/outside/reference.o $(BUILD)/tests/common/memory.o

# A unit of the solver may ask the judge.
$(patsubst %.c,$(BUILD)/%,$(wildcard tests/rank/*_unit.c)): $(COMMON_OBJECTS)

$(BUILD)/tests/program/%_run: $(BUILD)/tests/program/%_run.o $(COMMON_OBJECTS)
	$(CC) $(ALL_CFLAGS) -o $@ $^ -lcmocka $(LIBRARIES)

$(BUILD)/tests/outside/%_run: $(BUILD)/tests/outside/%_run.o $(OUTSIDE_OBJECTS) $(COMMON_OBJECTS)
	$(CC) $(ALL_CFLAGS) -o $@ $^ -lcmocka $(shell pkg-config --libs igraph) $(LIBRARIES)

$(HYPERLINKS): $(HYPERLINKS).o $(BUILD)/tests/outside/reference.o $(BUILD)/tests/common/memory.o
	$(CC) $(ALL_CFLAGS) -o $@ $^ $(shell pkg-config --libs gumbo)

# Everything that scripts/check runs.
runs: $(BUILD)/windrow $(BUILD)/crawlgen $(RUNS) $(HYPERLINKS)

.PHONY: runs
