# Two commands matter: `make demo` and `make test`. Each installs what it needs, builds and runs.
# Others: demo-once, build, bench, evaluate, format, lint, deps, clean.

SHELL := /bin/bash
MODE ?= release
OUT ?= build
B := $(OUT)/$(MODE)
CC ?= gcc

WARN := -Wall -Wextra -Wpedantic -Wconversion -Wshadow -Wstrict-prototypes -Wmissing-prototypes \
	-Wvla -Wformat=2 -Werror
CPPFLAGS += -D_GNU_SOURCE -Iinclude -I$(B)/generated
CFLAGS_release := -O2 -g -D_FORTIFY_SOURCE=2 -fstack-protector-strong
CFLAGS_sanitize := -O1 -g -fsanitize=address,undefined -fno-sanitize-recover=all \
	-fno-omit-frame-pointer
LDFLAGS_release := -Wl,-z,relro,-z,now
LDFLAGS_sanitize := -fsanitize=address,undefined
CFLAGS_ALL := -std=c17 -fPIE -ffp-contract=off -pthread $(WARN) $(CFLAGS_$(MODE)) $(CFLAGS)
LDFLAGS_ALL := -pie -pthread $(LDFLAGS_$(MODE)) $(LDFLAGS)

# What each room may stand on. A room links against these and nothing else in its unit tests, so an
# arrow that points up does not link.
ROOMS := cli api http campaign export store lightcurve consensus ephemeris base
NEEDS_base :=
NEEDS_lightcurve := base
NEEDS_consensus := base
NEEDS_ephemeris := base
NEEDS_store := base
NEEDS_export := base
NEEDS_http := base
NEEDS_campaign := store export lightcurve consensus ephemeris base
NEEDS_api := http $(NEEDS_campaign) campaign
NEEDS_cli := api http campaign $(NEEDS_campaign)

LIBS_base := -lsodium -lm
LIBS_lightcurve := -lcfitsio -larchive -lgsl -lgslcblas -lz
LIBS_ephemeris := -lgsl -lgslcblas
LIBS_consensus := -lgsl -lgslcblas
LIBS_store := -lsqlite3 -lz
LIBS_export :=
LIBS_http := -lmicrohttpd -ljansson -lz
LIBS_campaign := -ljansson -lunistring -lcurl -lgsl -lgslcblas -lz
LIBS_api := -ljansson
LIBS_cli := -ljansson

LIBS_ALL := $(foreach r,$(ROOMS),$(LIBS_$(r)))

sources = $(sort $(wildcard server/$(1)/*.c))
objects = $(patsubst %.c,$(B)/%.o,$(call sources,$(1)))
archive = $(B)/room-$(1).a

.PHONY: all build deps deps-test demo demo-once test bench evaluate format lint clean
all: build
build: $(B)/ebbmark

define room_rules
$(call archive,$(1)): $(call objects,$(1))
	@rm -f $$@
	@mkdir -p $$(@D)
	$$(AR) rcsD $$@ $$^
endef
$(foreach r,$(ROOMS),$(eval $(call room_rules,$(r))))

$(B)/%.o: %.c
	@mkdir -p $(@D)
	$(CC) $(CPPFLAGS) $(CFLAGS_ALL) -MMD -MP -c $< -o $@

# web/ and migrations/ are carried inside the program, so that it is one file.
$(B)/generated/web_files.c: $(sort $(shell find web -type f ! -path '*/node_modules/*')) \
		server/api/embed-web.sh server/api/openapi.json
	@mkdir -p $(@D)
	server/api/embed-web.sh web $(B)/generated > $@.part && mv $@.part $@
$(B)/generated/migrations.c: $(sort $(wildcard migrations/*.sql)) server/store/embed-migrations.sh
	@mkdir -p $(@D)
	server/store/embed-migrations.sh migrations > $@.part && mv $@.part $@
$(B)/generated/%.o: $(B)/generated/%.c
	$(CC) $(CPPFLAGS) -I. $(CFLAGS_ALL) -c $< -o $@
$(call archive,store): $(B)/generated/migrations.o
$(call archive,api): $(B)/generated/web_files.o

$(B)/ebbmark: $(B)/server/main.o $(foreach r,$(ROOMS),$(call archive,$(r)))
	$(CC) $(LDFLAGS_ALL) $< -Wl,--start-group $(foreach r,$(ROOMS),$(call archive,$(r))) -Wl,--end-group \
		$(LIBS_ALL) -o $@

# Unit tests: tests/unit/<room>/<name>.c links against that room and what it stands on.
unit_sources := $(sort $(wildcard tests/unit/*/*.c))
unit_programs := $(patsubst %.c,$(B)/%,$(unit_sources))
define unit_rule
$(B)/tests/unit/$(1)/%: tests/unit/$(1)/%.c $(call archive,$(1)) $(foreach r,$(NEEDS_$(1)),$(call archive,$(r)))
	@mkdir -p $$(@D)
	$$(CC) $$(CPPFLAGS) -Itests/unit $$(CFLAGS_ALL) -MMD -MP $$(LDFLAGS_ALL) $$< \
		-Wl,--start-group $(call archive,$(1)) $(foreach r,$(NEEDS_$(1)),$(call archive,$(r))) -Wl,--end-group \
		-lcmocka $$(LIBS_$(1)) $(foreach r,$(NEEDS_$(1)),$$(LIBS_$(r))) -o $$@
endef
$(foreach r,$(ROOMS),$(eval $(call unit_rule,$(r))))
.PHONY: unit-programs
unit-programs: $(unit_programs)

# Drivers of the reference checks and benches: tests/reference/<name>.c and tests/bench/<name>.c link the
# whole program but its main.
whole_rooms := $(filter-out cli,$(ROOMS))
define driver_rule
$(B)/tests/$(1)/%: tests/$(1)/%.c $(foreach r,$(whole_rooms),$(call archive,$(r)))
	@mkdir -p $$(@D)
	$$(CC) $$(CPPFLAGS) $$(CFLAGS_ALL) -MMD -MP $$(LDFLAGS_ALL) $$< \
		-Wl,--start-group $(foreach r,$(whole_rooms),$(call archive,$(r))) -Wl,--end-group \
		$$(LIBS_ALL) -o $$@
endef
$(foreach d,bench,$(eval $(call driver_rule,$(d))))

# Reference drivers stand on the pure rooms only.
pure_rooms := lightcurve consensus ephemeris export base
$(B)/tests/reference/%: tests/reference/%.c $(foreach r,$(pure_rooms),$(call archive,$(r)))
	@mkdir -p $(@D)
	$(CC) $(CPPFLAGS) $(CFLAGS_ALL) -MMD -MP $(LDFLAGS_ALL) $< \
		-Wl,--start-group $(foreach r,$(pure_rooms),$(call archive,$(r))) -Wl,--end-group \
		$(foreach r,$(pure_rooms),$(LIBS_$(r))) -lz -o $@

# Fuzz targets of the pure rooms: make build/fuzz/csv && build/fuzz/csv FOLDER tests/fuzz/csv-seeds
$(OUT)/fuzz/%: tests/fuzz/%.c $(foreach r,$(pure_rooms),$(call sources,$(r)))
	@mkdir -p $(@D)
	clang $(CPPFLAGS) -std=c17 -g -O1 -pthread -fsanitize=fuzzer,address,undefined \
		-fno-sanitize-recover=undefined $^ $(foreach r,$(pure_rooms),$(LIBS_$(r))) -lz -o $@

# The parsers of http/ that read what strangers send; they need nothing of the library.
http_parsers := $(addprefix server/http/,accept.c cookie.c proxy.c uri.c) $(call sources,base)
$(OUT)/fuzz/query $(OUT)/fuzz/cookie: $(OUT)/fuzz/%: tests/fuzz/%.c $(http_parsers)
	@mkdir -p $(@D)
	clang $(CPPFLAGS) -std=c17 -g -O1 -pthread -fsanitize=fuzzer,address,undefined \
		-fno-sanitize-recover=undefined $^ $(LIBS_base) -o $@

# The reader of reviews made elsewhere stands on base alone.
$(OUT)/fuzz/records: tests/fuzz/records.c $(addprefix server/campaign/,records.c vector.c) $(call sources,base)
	@mkdir -p $(@D)
	clang $(CPPFLAGS) -std=c17 -g -O1 -pthread -fsanitize=fuzzer,address,undefined \
		-fno-sanitize-recover=undefined $^ $(LIBS_base) -o $@

# ---- what is needed from Debian ----
build_packages := gcc libc6-dev gzip libmicrohttpd-dev libsqlite3-dev libjansson-dev libcfitsio-dev \
	libsodium-dev libgsl-dev libarchive-dev libcurl4-openssl-dev libunistring-dev zlib1g-dev
demo_packages := curl:curl
test_packages := libcmocka-dev python3 python3-numpy python3-scipy python3-astropy python3-jsonschema \
	stilts node:nodejs npm:npm chromium curl:curl
lint_packages := clang-format clang-tidy cppcheck

.PHONY: deps-build deps-lint
deps-build:
	@server/install-packages.sh "build Ebbmark" $(build_packages)
deps: deps-build
	@server/install-packages.sh "run the demo" $(demo_packages)
deps-test: deps
	@server/install-packages.sh "test Ebbmark" $(test_packages)
deps-lint:
	@server/install-packages.sh "check the source" $(lint_packages)

# ---- the two commands ----
demo: deps
	@$(MAKE) --no-print-directory -s -j2 build
	@demo-data/demo.sh $(B)/ebbmark serve
demo-once: deps
	@$(MAKE) --no-print-directory -s -j2 build
	@demo-data/demo.sh $(B)/ebbmark once

test: deps-test
	@echo "Building, twice: as it ships, and with the sanitizers."
	@$(MAKE) --no-print-directory -s -j2 MODE=release build reference-programs
	@$(MAKE) --no-print-directory -s -j2 MODE=sanitize build unit-programs
	@/usr/bin/python3 tests/run.py --release $(OUT)/release --sanitize $(OUT)/sanitize $(SUITES)

.PHONY: reference-programs bench-programs
reference-programs: $(patsubst %.c,$(B)/%,$(wildcard tests/reference/*.c))
bench-programs: $(patsubst %.c,$(B)/%,$(wildcard tests/bench/*.c))

# Ratios against the bare libraries, measured in one run. BENCH="handout fits_load" for some of it.
bench: deps-test
	@$(MAKE) --no-print-directory -s -j2 build bench-programs
	@tests/bench/run.sh $(B) $(BENCH)

# The consensus against vote counting and the plain two-class form, over seeds and mixes of reviewers.
evaluate: deps-build
	@$(MAKE) --no-print-directory -s -j2 $(B)/tests/bench/evaluate
	@$(B)/tests/bench/evaluate | tee $(OUT)/evaluation.txt

# ---- the source itself ----
c_sources = $(shell git ls-files 'server/*.c' 'server/*.h' 'include/*.h' 'tests/*.c' 'tests/*.h')
format: deps-lint
	clang-format -i $(c_sources)
lint: deps-build deps-lint $(B)/generated/web_files.c $(B)/generated/migrations.c
	clang-format --dry-run --Werror $(c_sources)
	cppcheck --quiet --std=c11 --language=c --enable=warning,performance,portability --inline-suppr --suppress=varFuncNullUB \
		--error-exitcode=1 -D_GNU_SOURCE -Iinclude server
	clang-tidy --quiet --warnings-as-errors='*' $(shell git ls-files 'server/*.c') -- \
		-std=c17 $(CPPFLAGS) -Wno-unknown-warning-option

clean:
	rm -rf $(OUT)

-include $(shell find $(B) -name '*.d' 2>/dev/null)
