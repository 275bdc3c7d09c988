# make check is the one test command: it installs what it needs, checks the code
# and tests it. DEVELOPERS.md says what each part is for.

SHELL       := /bin/bash
.SHELLFLAGS := -euo pipefail -c
.NOTPARALLEL:

# The product is pure Go; only the race detector needs a C compiler.
export CGO_ENABLED := 0

GO    ?= go
TIMED := .ci/timed
# Of a package: a guard against what hangs, far beyond what a slow machine needs.
TEST  := $(GO) test -timeout 1200s

# Packages with goroutines are tested under the race detector, all others
# without it. cmd/internal/house checks that none is missing here.
RACE := ./alert ./alert/send ./alert/page ./collector ./collector/mqtt ./collector/opcua \
        ./collector/plant ./collector/trend ./store ./cmd/internal/daemon ./cmd/midwatch

# Tests of physics and arithmetic in those packages: days of simulation that have
# no goroutine and are slow under the detector. They run without it.
UNRACED := ./collector/plant
SERVED  := Nothing|Counted|Browse|Clients|Overflow|Refuses|Clock

# What is counted and measured is only right without the race detector.
COUNTED := Alloc|Garbage

# Fuzz targets are found, not listed.
FUZZTIME ?= 30s

.PHONY: check start install format vet lint build cross house test short-bench race demo soak fuzz quality bench dist dist-check clean

check: start install
	@$(TIMED) "format"       $(MAKE) -s format
	@$(TIMED) "vet"          $(MAKE) -s vet
	@$(TIMED) "staticcheck"  $(MAKE) -s lint
	@$(TIMED) "build"        $(MAKE) -s build
	@$(TIMED) "cross builds" $(MAKE) -s cross
	@$(TIMED) "the house: modules, licences, words, layers" $(MAKE) -s house
	@$(TIMED) "tests"        $(MAKE) -s test
	@$(TIMED) "the quality of detection, short" $(MAKE) -s short-bench
	@$(TIMED) "tests under the race detector, with outside peers" $(MAKE) -s race
	@$(TIMED) "the demo, end to end" $(MAKE) -s demo
	@$(TIMED) --sum
	@echo "make check: all well"

start:
	@mkdir -p .build && rm -f .build/times

install: start
	@$(TIMED) "install" .ci/install

format:
	@bad=$$(gofmt -l $$(git ls-files -co --exclude-standard '*.go')); \
	if [ -n "$$bad" ]; then echo "not formatted; hint: gofmt -w"; echo "$$bad"; exit 1; fi

vet:
	@$(GO) vet ./...

# Built in its own module, so that its tree never enters ours.
lint:
	@$(GO) -C .ci/tools build -o ../../.build/staticcheck honnef.co/go/tools/cmd/staticcheck
	@.build/staticcheck ./...

build:
	@$(GO) build -o .build/midwatch ./cmd/midwatch
	@.build/midwatch version

# amd64 is the machine of most who build; these are the edge boxes. vet finds
# what only breaks where int has 32 bits.
cross:
	@GOOS=linux GOARCH=arm64 $(GO) build -trimpath -o .build/midwatch-arm64 ./cmd/midwatch
	@GOOS=linux GOARCH=arm GOARM=7 $(GO) build -trimpath -o .build/midwatch-armv7 ./cmd/midwatch
	@GOOS=linux GOARCH=arm GOARM=7 $(GO) vet ./collector ./detect/... ./store ./configs

house:
	@$(GO) mod verify
	@$(TEST) -count=1 ./cmd/internal/house

test:
	@$(TEST) -short $$($(GO) list ./... | grep -v -x -F -f <($(GO) list $(RACE)) | grep -v -E '/cmd/internal/(house|quality)')
	@$(TEST) -short $(UNRACED)
	@$(TEST) -run '$(COUNTED)' $(RACE)

# What is found, missed and said for nothing, over a tenth of the scenarios of make quality.
short-bench:
	@$(TEST) ./cmd/internal/quality/...

race:
	@CGO_ENABLED=1 MIDWATCH_PEERS=1 $(TEST) -race -short $(filter-out $(UNRACED),$(RACE))
	@CGO_ENABLED=1 $(TEST) -race -short -run '$(SERVED)' $(UNRACED)
	@MIDWATCH_PEERS=1 $(TEST) -run Browser ./alert/dossier

# The demo as people run it, until the faults that show first are told.
demo:
	@$(TEST) -count=1 -run 'TestDemo$$' ./cmd/internal/demo

# The long tests: fuzzing, the whole quality bench, crash tests with hundreds of
# kills. An evening on two cores.
soak: install fuzz quality
	@MIDWATCH_PEERS=1 MIDWATCH_SOAK=1 $(TEST) -timeout 3h -count=1 -v ./store ./collector/... ./cmd/... ./alert/dossier/... | grep -v '^=== '

fuzz:
	@for pkg in $$($(GO) list ./...); do \
		for target in $$($(GO) test -list '^Fuzz' $$pkg | grep '^Fuzz' || true); do \
			echo "== $$pkg $$target"; \
			$(GO) test -run '^$$' -fuzz "^$$target\$$" -fuzztime $(FUZZTIME) $$pkg; \
		done; \
	done

# How much is found and how much is said for nothing, over simulated loop-years.
quality:
	@$(GO) run ./cmd/internal/quality/bench -n 20 -d 14
	@$(GO) run ./cmd/internal/quality/others/bench -n 12 -d 14
	@$(GO) run ./cmd/internal/quality/bench -te testdata/te

bench:
	@$(GO) test -run '^$$' -bench . -benchmem -count 6 ./...

# Release archives for Linux, of what is committed.
dist:
	@.ci/dist

# The archives twice, byte by byte, and tried where there is nothing else.
dist-check:
	@.ci/dist-check

clean:
	@rm -rf .build dist testdata/peers/*/node_modules
