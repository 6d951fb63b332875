#!/bin/sh
# The whole recorder: synthetic, file and pipe intakes, what it says and what it leaves behind.
. tests/support/tap.sh
plan 21

channels='channels = ( { name = "diode"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },
  { name = "gps"; column = 2; measure = "pulse"; } );'
expected='expected = ( { source = "Anwen"; kind = "immersion"; utc = "2031-04-02T01:23:45.5Z"; sigma_s = 0.8;
  moon_distance_km = 371500; shadow_speed_mps = 612; } );'
station='station = { name = "Brackenfold"; };'

# The event of every run here: 20 s, truly at 01:23:45.812345 UTC, by a card 40 ppm off.
synthetic='driver = "synthetic"; seed = 5; duration_s = 26; start_utc = "2031-04-02T01:23:30.25Z"; start_sigma_s = 0.05;
  kind = "immersion"; contact_s = 15.562345; distance_km = 371500; shadow_speed_mps = 640; wavelength_nm = 620;
  passband_nm = 120; aperture_m = 0.28; snr = 30; level = 0.02; pulse = true; clock_error_ppm = 40;'

run "$build/limbwatchd" --version
[ "$status" -eq 0 ] && grep -q '^limbwatchd [0-9]' "$work/out"
ok $? "--version"
run "$build/limbwatchd" --help
[ "$status" -eq 0 ] && grep -q -- '--config FILE' "$work/out"
ok $? "--help"
run "$build/limbwatchd" --frobnicate
refused 2 'frobnicate' "an unknown option is refused with status 2"
run "$build/limbwatchd" --config "$work/none.conf"
refused 2 "$work/none.conf" "a missing configuration is refused with status 2"

cat > "$work/a.conf" <<END
$station intake = { $synthetic }; $channels $expected keep = { folder = "$work/a"; };
END
run "$build/limbwatchd" --config "$work/a.conf" --check
[ "$status" -eq 0 ] && grep -q 'immersion of Anwen at 2031-04-02T01:23:45.500Z' "$work/out" && grep -q 'GB a day' "$work/out"
ok $? "--check says in words what is expected and what a day takes"
[ ! -e "$work/a" ]
ok $? "--check leaves nothing behind"

run "$build/limbwatchd" --config "$work/a.conf" --json
cp "$work/out" "$work/a.json"
"$python" - "$work/a.json" <<'END'
import json, sys
from datetime import datetime
lines = open(sys.argv[1]).read().splitlines()
assert len(lines) == 1, lines
c = json.loads(lines[0])
seconds = datetime.fromisoformat(c["utc"].replace("Z", "+00:00")).timestamp() % 60
assert len(c["utc"]) == len("2031-04-02T01:23:45.812345Z")
assert abs(seconds - 45.812345) < 5 * c["sigma_s"] and c["sigma_s"] < 1e-3, (seconds, c["sigma_s"])
assert c["kind"] == "immersion" and c["verdict"] == "fringes confirmed" and c["source"] == "Anwen"
assert c["time_quality"] == "pulse" and c["second_confirmed"] is True and 24 < c["snr"] < 36
assert abs(c["shadow_speed_mps"] / 640 - 1) < 0.1
END
ok $? "a synthetic contact is caught, confirmed and timed within its uncertainty"

segment=$("$python" -c 'import json,sys; print(json.loads(open(sys.argv[1]).readline())["segment"])' "$work/a.json")
[ -f "$segment" ] && [ -f "${segment%.wav}.json" ] && [ "$(ls "$work/a" | wc -l)" -eq 2 ]
ok $? "one segment with its sidecar, and nothing else, is left"
sox --i "$segment" 2>&1 | grep -q 'Channels *: 2' && sox "$segment" -n stat 2> /dev/null
ok $? "sox reads the segment"

cat > "$work/b.conf" <<END
$station intake = { driver = "file"; path = "$segment"; bext_sigma_s = 0.05; }; $channels keep = { folder = "$work/b"; };
END
run "$build/limbwatchd" --config "$work/b.conf" --json
cp "$work/out" "$work/b.json"
"$python" - "$work/a.json" "$work/b.json" <<'END'
import json, sys
from datetime import datetime
a, b = (json.loads(open(f).readline()) for f in sys.argv[1:])
t = [datetime.fromisoformat(c["utc"].replace("Z", "+00:00")).timestamp() for c in (a, b)]
assert b["source"] is None and b["kind"] == "immersion" and b["time_quality"] == "pulse"
assert abs(t[0] - t[1]) < 2 * a["sigma_s"], (t, a["sigma_s"])
END
ok $? "the segment, replayed from the file without prediction, gives the same contact"

# The same samples raw through a pipe, with a time from the configuration.
sox "$segment" -t raw -e signed -b 24 -L "$work/raw"
cat > "$work/c.conf" <<END
$station intake = { driver = "pipe"; path = "-"; rate_hz = 48000; channels = 2; format = "S24_3"; };
$channels keep = { folder = "$work/c"; };
END
status=0
"$build/limbwatchd" --config "$work/c.conf" --json < "$work/raw" > "$work/out" 2> "$work/err" || status=$?
[ "$status" -eq 0 ] && grep -q '"kind":"immersion"' "$work/out"
ok $? "the same samples through standard input give the contact"

head -c 1000003 "$work/raw" > "$work/cut"
status=0
"$build/limbwatchd" --config "$work/c.conf" --json < "$work/cut" > "$work/out" 2> "$work/err" || status=$?
refused 1 'byte' "a pipe closed in the middle of a frame is said"

# Without any time.
sed 's/bext_sigma_s = 0.05;/start_sigma_s = 1;/' "$work/b.conf" > "$work/d.conf"
sox "$segment" -t flac "$work/untimed.flac"
sed -i "s|path = \"[^\"]*\"|path = \"$work/untimed.flac\"|; s|folder = .*|folder = \"$work/d\"; };|" "$work/d.conf"
run "$build/limbwatchd" --config "$work/d.conf" --json
grep -q '"utc":null' "$work/out" && grep -q '"time_quality":"free"' "$work/out" && ls "$work/d" | grep -q '^undated-.*wav$'
ok $? "a file that does not say when it was taken is recorded as free, undated"

# Always watching, no pulse, everything kept.
cat > "$work/e.conf" <<END
$station intake = { $synthetic }; channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } );
keep = { folder = "$work/e"; everything = true; };
END
run "$build/limbwatchd" --config "$work/e.conf" --json
grep -q '"time_quality":"host"' "$work/out"
ok $? "without a pulse the time is host"
frames=$("$python" -c 'import sys, wave; print(wave.open(sys.argv[1]).getnframes())' "$work"/e/*.wav)
[ "$frames" -ge 1248000 ] && [ "$frames" -le 1248100 ]
ok $? "everything = true keeps every frame ($frames)"

# Run twice into one folder: nothing is overwritten.
before=$(md5sum "$work"/a/*)
run "$build/limbwatchd" --config "$work/a.conf" --json
echo "$before" | md5sum -c --quiet && [ "$(ls "$work/a" | wc -l)" -eq 4 ]
ok $? "a second run into the same folder overwrites nothing"

run "$build/limbwatch" settings --sample
cmp -s "$work/out" etc/limbwatch.conf
ok $? "etc/limbwatch.conf is what the table of settings says"

# Two predictions for one edge: it belongs to the nearer.
cat > "$work/f.conf" <<END
$station intake = { $synthetic }; $channels
expected = ( { source = "Brock"; kind = "immersion"; utc = "2031-04-02T01:23:47.9Z"; sigma_s = 0.8; shadow_speed_mps = 640; },
  { source = "Anwen"; kind = "immersion"; utc = "2031-04-02T01:23:45.5Z"; sigma_s = 0.8; shadow_speed_mps = 612; } );
keep = { folder = "$work/f"; };
END
run "$build/limbwatchd" --config "$work/f.conf" --json
[ "$(wc -l < "$work/out")" -eq 1 ] && grep -q '"source":"Anwen"' "$work/out"
ok $? "an edge that two vigils see is one contact, of the nearer prediction"

# A pipe without a date of its own is dated by the host's clock, from its first segment on.
cat > "$work/g.conf" <<END
intake = { driver = "pipe"; path = "-"; rate_hz = 48000; channels = 2; format = "S24_3"; };
clock = { host_sigma_s = 0.01; };
$channels keep = { folder = "$work/g"; everything = true; };
END
head -c 600000 "$work/raw" | "$build/limbwatchd" --quiet --config "$work/g.conf" > "$work/out" 2> "$work/err"
ls "$work/g" | grep -q "^$(date -u +%Y%m)[0-9]*T[0-9]*Z_unnamed.wav\$"
ok $? "a pipe is dated by the host's clock"

# Room is made at the start: a full disk would refuse the first file, and a recorder that never starts makes none.
for free in 0 1000000; do
	cat > "$work/h.conf" <<END
$station intake = { driver = "synthetic"; duration_s = 3; start_utc = "2031-04-02T01:23:30.25Z"; };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } ); watch = { outside_vigils = false; };
keep = { folder = "$work/h"; free_mib = $free; everything = $([ $free = 0 ] && echo true || echo false); };
END
	run "$build/limbwatchd" --config "$work/h.conf"
	[ $free = 0 ] && kept=$(ls "$work/h" | wc -l)
done
[ "$kept" -eq 2 ] && [ -z "$(ls "$work/h")" ] && grep -q 'removed to make room' "$work/err"
ok $? "the oldest recording without a contact makes room at the start"

# What cannot be opened for repair stands in nobody's way.
ln -s /proc/version "$work/h/20300101T000000Z_x.wav.part"      # can be neither written nor measured
sed -i 's/everything = false/everything = true/; s/free_mib = [0-9]*/free_mib = 0/' "$work/h.conf"
run "$build/limbwatchd" --config "$work/h.conf"
[ "$status" -eq 0 ] && grep -q '20300101T000000Z_x.wav.part cannot be repaired' "$work/err" && ls "$work/h" | grep -q '_brackenfold.wav$'
ok $? "a file that cannot be repaired is said, and recording begins all the same"
