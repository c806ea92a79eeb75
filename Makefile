# Two commands serve a newcomer: `make run` and `make test`. Each installs what
# it lacks where it can (Debian packages, as root or through sudo without a
# password) and says what is missing where it cannot.

GO   ?= go
BIN  := bin/offbeat
NEED := sh deploy/need.sh

# Sound-card support needs PortAudio's headers and a C compiler; without them
# everything else still builds.
SOUND = $(shell command -v $${CC:-gcc} >/dev/null 2>&1 && pkg-config --exists portaudio-2.0 2>/dev/null && echo portaudio)
TAGS  = $(if $(SOUND),-tags $(SOUND))
CGO   = $(if $(SOUND),1,0)
VERSION = $(shell git describe --tags --always --dirty 2>/dev/null || echo development)
LDFLAGS = -s -w -X main.version=$(VERSION)

.DEFAULT_GOAL := help
.PHONY: help run build test lint bench bench-accuracy need-sound need-test need-bench

help: ## this list
	@sed -n 's/^\([a-z][a-z-]*\):.*## \(.*\)/  make \1\t\2/p' $(MAKEFILE_LIST) | expand -t 20

run: build ## build and run the daemon on the simulated bench
	./$(BIN) run

build: need-sound ## build bin/offbeat, with sound-card support where it can be had
	CGO_ENABLED=$(CGO) $(GO) build -trimpath $(TAGS) -ldflags '$(LDFLAGS)' -o $(BIN) ./cmd/offbeat
	@test -n "$(SOUND)" || echo "built without sound-card support (PortAudio's headers or a C compiler are missing)"

test: need-sound need-test lint ## all checks and tests
	CGO_ENABLED=0 $(GO) build ./...
	CGO_ENABLED=0 $(GO) vet ./...
	CGO_ENABLED=$(CGO) $(GO) test $(TAGS) -timeout 15m ./...
	@test -n "$(SOUND)" || echo "NOTE: sound cards were not tested: PortAudio's headers or a C compiler are missing"

lint: ## gofmt, go vet, staticcheck
	@unformatted="$$(gofmt -l $$(git ls-files '*.go' 2>/dev/null || find . -name '*.go'))"; \
	test -z "$$unformatted" || { echo "gofmt would change: $$unformatted"; exit 1; }
	CGO_ENABLED=$(CGO) $(GO) vet $(TAGS) ./...
	CGO_ENABLED=$(CGO) $(GO) tool staticcheck $(TAGS) ./...

bench: build need-test need-bench ## the figures: accuracy against the bounds, speed, memory, load
	OFFBEAT_LONG=1 CGO_ENABLED=$(CGO) $(GO) test $(TAGS) -timeout 60m -count=1 -v -run 'Bound|Bias|NoiseHour|Uncertainty|Quadrature|Mixer' ./dsp | grep -E 'ratio|bias|readings|u/rms|^(---|ok|FAIL)|Hz/|panic'
	OFFBEAT_LONG=1 CGO_ENABLED=$(CGO) $(GO) test $(TAGS) -timeout 10m -count=1 -v -run 'Published|NumPy|Coverage' ./dsp/stability
	CGO_ENABLED=$(CGO) $(GO) test $(TAGS) -run '^$$' -bench . -benchmem ./dsp/... ./capture/...
	OFFBEAT_LONG=1 CGO_ENABLED=$(CGO) $(GO) test $(TAGS) -timeout 30m -count=1 -v -run 'TestSpeed|TestLoad|TestMemory|TestExportMemory' ./cmd/offbeat

bench-accuracy: ## every accuracy figure beside its limit (hours)
	CGO_ENABLED=0 $(GO) run ./cmd/accuracy --scenes 200

need-sound:
	@$(NEED) "sound-card support" portaudio19-dev pkg-config gcc libc6-dev

need-bench:
	@$(NEED) "figures beside other programs" python3-numpy

need-test:
	@$(NEED) "tests against other programs" sox libsox-fmt-all ffmpeg flac sndfile-programs pulseaudio pulseaudio-utils libasound2-plugins prometheus python3-prometheus-client sqlite3
