# limbwatch: build, check and install.  One file, no recursion into folders; see DEVELOPERS.md.
#
#   make            the programs                  make check      set up, build, run the tests
#   make demo       set up, build, run the demo   make bench      measurements (ratios, instruction counts)
#   make deps       install the Debian packages   make install    DESTDIR= PREFIX= SYSCONFDIR=
#   make check-hardware                           tests on a virtual machine with misbehaving devices
#   SAN=address,undefined | SAN=thread            a sanitised build in a folder of its own
#   CROSS=aarch64-linux-gnu-                      a cross build in a folder of its own

VERSION    := 0.1.0
CROSS      ?=
CC         := $(if $(filter default,$(origin CC)),$(CROSS)gcc,$(CC))
AR         := $(if $(filter default,$(origin AR)),$(CROSS)gcc-ar,$(AR))
PKG_CONFIG ?= $(CROSS)pkg-config
PYTHON     ?= /usr/bin/python3
CFLAGS     ?= -O2 -g
PREFIX     ?= /usr/local
SYSCONFDIR ?= /etc
comma      := ,
BUILD      ?= build$(if $(CROSS),-$(CROSS:-=))$(if $(SAN),-$(subst $(comma),-,$(SAN)))

PKGS       := alsa sndfile libconfig erfa gsl jansson libsystemd
DEPS_BUILD := gcc libc6-dev make pkg-config libasound2-dev libsndfile1-dev libconfig-dev liberfa-dev \
              libgsl-dev libjansson-dev libsystemd-dev tzdata
DEPS_CHECK := libcmocka-dev perl python3-numpy python3-scipy sox libsox-fmt-base pulseaudio \
              libasound2-plugins systemd
DEPS_BENCH := valgrind
DEPS_HARDWARE = mmdebstrap busybox-static cpio e2fsprogs kmod bsdextrautils python3-numpy python3-scipy \
              $(if $(filter arm64,$(shell dpkg --print-architecture)),qemu-system-arm,qemu-system-x86)

# Looked up when a rule needs them, so that `make deps` works before pkg-config is there.
pkg_cflags  = $(eval pkg_cflags := $$(shell $(PKG_CONFIG) --cflags $(PKGS)))$(pkg_cflags)
pkg_libs    = $(eval pkg_libs := $$(shell $(PKG_CONFIG) --libs $(PKGS)))$(pkg_libs)

override CPPFLAGS += -Iinclude -D_GNU_SOURCE -DLIMBWATCH_VERSION='"$(VERSION)"'
override CFLAGS   += -std=c17 -Wall -Wextra -Wshadow -Wmissing-prototypes -Wstrict-prototypes -pthread -MMD -MP \
                     $(if $(WERROR),-Werror) $(if $(SAN),-fsanitize=$(SAN) -fno-sanitize-recover=all)
override LDFLAGS  += -pthread $(if $(SAN),-fsanitize=$(SAN))

rooms      := base optics sky clock signal keep watch reduce report service command
lib_src    := $(foreach room,$(rooms),$(wildcard daemon/$(room)/*.c)) $(wildcard drivers/*.c)
lib_obj    := $(lib_src:%.c=$(BUILD)/%.o)
library    := $(BUILD)/liblimbwatch.a
programs   := $(BUILD)/limbwatchd $(BUILD)/limbwatch
support    := $(patsubst %.c,$(BUILD)/%.o,$(wildcard tests/support/*.c))
tests      := $(patsubst tests/%.c,$(BUILD)/tests/%,$(wildcard tests/test_*.c))
benches    := $(patsubst tests/%.c,$(BUILD)/tests/%,$(wildcard tests/bench/bench_*.c))
# Preloaded into the plain build only: a sanitizer brings its own malloc.
witnesses  := $(if $(SAN),,$(patsubst tests/%.c,$(BUILD)/tests/%.so,$(wildcard tests/preload/*.c)))
fuzzers    := $(patsubst tests/%.c,$(BUILD)/tests/%,$(wildcard tests/fuzz/fuzz_*.c))

# V=1 shows the commands.
say = $(if $(V),,@printf '  %-6s %s\n' $(1) $(2);)

all: $(programs)

$(BUILD)/%.o: %.c
	@mkdir -p $(@D)
	$(call say,CC,$<)$(CC) $(CPPFLAGS) $(pkg_cflags) $(CFLAGS) -c -o $@ $<

$(library): $(lib_obj)
	$(call say,AR,$@)rm -f $@ && $(AR) rcs $@ $^

$(BUILD)/limbwatchd $(BUILD)/limbwatch: $(BUILD)/%: $(BUILD)/daemon/%.o $(library)
	$(call say,LD,$@)$(CC) $(LDFLAGS) -o $@ $^ $(pkg_libs) -lm

$(tests): $(BUILD)/tests/%: $(BUILD)/tests/%.o $(support) $(library)
	$(call say,LD,$@)$(CC) $(LDFLAGS) -o $@ $^ -lcmocka $(pkg_libs) -lm

$(benches) $(fuzzers): $(BUILD)/tests/%: $(BUILD)/tests/%.o $(support) $(library)
	$(call say,LD,$@)$(CC) $(LDFLAGS) -o $@ $^ $(pkg_libs) -lm

$(witnesses): $(BUILD)/tests/%.so: tests/%.c
	@mkdir -p $(@D)
	$(call say,CC,$<)$(CC) $(CPPFLAGS) -std=c17 -O2 -g -Wall -Wextra -shared -fPIC -o $@ $< -ldl

tests: all $(tests) $(fuzzers) $(witnesses) $(BUILD)/tests/bench/bench_detector

# Set up everything, build, pass the tests.
check: deps-check
	$(MAKE) run-check

run-check: tests
	BUILD=$(BUILD) PYTHON=$(PYTHON) CMOCKA_MESSAGE_OUTPUT=TAP prove -e '' $(tests) $(sort $(wildcard tests/*.t))

# Set up everything, build, run the main job on the invented scenario.
demo: deps-build
	$(MAKE) run-demo

run-demo: all
	BUILD=$(BUILD) sh tests/demo.sh

bench: deps-check deps-bench
	$(MAKE) run-bench

run-bench: all $(benches)
	BUILD=$(BUILD) PYTHON=$(PYTHON) sh tests/bench/run

# The installed recorder on a virtual machine with a Debian kernel, whose card, disks and clock misbehave.
check-hardware: deps-build deps-hardware
	@$(MAKE) --no-print-directory run-check-hardware

run-check-hardware: all
	@BUILD=$(BUILD) PYTHON=$(PYTHON) sh tests/hardware/run

define install_packages
	@missing=; for p in $(1); do \
		dpkg-query -W -f '$${Status}\n' $$p 2>/dev/null | grep -q '^install ok installed' || missing="$$missing $$p"; \
	done; \
	if [ -n "$$missing" ]; then \
		echo "installing Debian packages:$$missing"; \
		sudo=; if [ "$$(id -u)" != 0 ]; then sudo=sudo; fi; \
		$$sudo env DEBIAN_FRONTEND=noninteractive sh -c \
			"apt-get update -qq && apt-get install -y -qq --no-install-recommends $$missing" >&2; \
	fi
endef

deps: deps-build deps-check deps-bench deps-hardware
deps-build:
	$(call install_packages,$(DEPS_BUILD))
deps-check:
	$(call install_packages,$(DEPS_BUILD) $(DEPS_CHECK))
deps-bench:
	$(call install_packages,$(DEPS_BENCH))
deps-hardware:
	$(call install_packages,$(DEPS_HARDWARE))

# The configuration belongs to the observer: the sample never takes the place of one that is there.  In DESTDIR nothing
# is started; on the machine itself user, folder and rules are there afterwards, and the recorder is for the observer
# to start (systemctl enable --now limbwatchd).
install: all
	install -D -m 755 $(BUILD)/limbwatchd $(DESTDIR)$(PREFIX)/sbin/limbwatchd
	install -D -m 755 $(BUILD)/limbwatch $(DESTDIR)$(PREFIX)/bin/limbwatch
	install -D -m 644 etc/limbwatch.conf $(DESTDIR)$(PREFIX)/share/limbwatch/limbwatch.conf
	[ -e $(DESTDIR)$(SYSCONFDIR)/limbwatch/limbwatch.conf ] || \
		install -D -m 644 etc/limbwatch.conf $(DESTDIR)$(SYSCONFDIR)/limbwatch/limbwatch.conf
	install -D -m 644 systemd/limbwatch.sysusers $(DESTDIR)$(PREFIX)/lib/sysusers.d/limbwatch.conf
	install -D -m 644 systemd/limbwatch.tmpfiles $(DESTDIR)$(PREFIX)/lib/tmpfiles.d/limbwatch.conf
	install -D -m 644 systemd/60-limbwatch.rules $(DESTDIR)$(PREFIX)/lib/udev/rules.d/60-limbwatch.rules
	install -d $(DESTDIR)$(PREFIX)/lib/systemd/system
	sed -e 's#@SBINDIR@#$(PREFIX)/sbin#; s#@DATADIR@#$(PREFIX)/share#; s#@SYSCONFDIR@#$(SYSCONFDIR)#' \
		systemd/limbwatchd.service > $(BUILD)/limbwatchd.service
	install -m 644 $(BUILD)/limbwatchd.service $(DESTDIR)$(PREFIX)/lib/systemd/system/limbwatchd.service
	if [ -z "$(DESTDIR)" ] && [ -d /run/systemd/system ]; then \
		systemd-sysusers limbwatch.conf && systemd-tmpfiles --create limbwatch.conf && \
		systemctl daemon-reload && udevadm control --reload && udevadm trigger; \
	fi

clean:
	rm -rf build build-*

.PHONY: all tests check run-check demo run-demo bench run-bench deps deps-build deps-check deps-bench deps-hardware \
        check-hardware run-check-hardware install clean
.DELETE_ON_ERROR:
-include $(shell find $(BUILD) -name '*.d' -type f 2>/dev/null)
