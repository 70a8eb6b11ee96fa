# windrow: `make` builds, `make check` tests, `make bench` measures, `make sanitize` tests under ASan and UBSan.
BUILD ?= build
CC ?= gcc
OPTIMIZE ?= -O2
EXTRA ?=
PACKAGES = libzstd lmdb libarchive libxxhash libidn2 libpsl jansson

# No -ffast-math and no contraction: a store and a ranking are the same bytes on every machine.
CFLAGS ?= -g
ALL_CFLAGS = -std=gnu11 -D_GNU_SOURCE $(OPTIMIZE) $(CFLAGS) -Wall -Wextra -Werror -ffp-contract=off -fPIC -pthread -Isrc \
	$(shell pkg-config --cflags $(PACKAGES)) -MMD -MP $(EXTRA)
LIBRARIES = $(shell pkg-config --libs $(PACKAGES)) -lm -pthread

LIBRARY_SOURCES = $(wildcard src/*/*.c)
LIBRARY_OBJECTS = $(LIBRARY_SOURCES:%.c=$(BUILD)/%.o)
WINDROW_SOURCES = $(filter-out tools/crawlgen.c,$(wildcard tools/*.c))
WINDROW_OBJECTS = $(WINDROW_SOURCES:%.c=$(BUILD)/%.o)
UNIT_SOURCES = $(wildcard tests/*/*_unit.c)
UNITS = $(UNIT_SOURCES:%.c=$(BUILD)/%)

all: $(BUILD)/windrow $(BUILD)/crawlgen $(BUILD)/libwindrow.a

$(BUILD)/libwindrow.a: $(LIBRARY_OBJECTS)
	@echo '  $@' && rm -f $@ && $(AR) rcs $@ $^

$(BUILD)/windrow: $(WINDROW_OBJECTS) $(BUILD)/libwindrow.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ $(LIBRARIES)

$(BUILD)/crawlgen: $(BUILD)/tools/crawlgen.o $(BUILD)/libwindrow.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $^ $(LIBRARIES)

$(BUILD)/%.o: %.c
	@mkdir -p $(@D)
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -c -o $@ $<

$(BUILD)/tests/%_unit: $(BUILD)/tests/%_unit.o $(BUILD)/tests/libcommon.a $(BUILD)/libwindrow.a
	@echo '  $@' && $(CC) $(ALL_CFLAGS) -o $@ $(filter %.o,$^) $(filter %.a,$^) -lcmocka $(LIBRARIES)

include tests/tests.mk

units: $(UNITS)

check:
	scripts/check --no-setup --build $(BUILD)

sanitize:
	scripts/check --no-setup --sanitize --build $(BUILD)

LINKS ?= 10M

bench:
	scripts/bench --build $(BUILD) --links $(LINKS)

bench-billion:
	scripts/bench --build $(BUILD) billion

clean:
	rm -rf $(BUILD)

.PHONY: all units check sanitize bench bench-billion clean
.SECONDARY:
-include $(shell find $(BUILD) -name '*.d' 2>/dev/null)
