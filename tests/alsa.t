#!/bin/sh
# The whole recorder on ALSA's real interface, without a sound card: alsa-lib's own plug-in gives a recording's samples.
. tests/support/tap.sh
plan 3
ALSA_CONFIG_PATH=tests/data/alsa/cards.conf
LIMBWATCH_RAW=$work/raw
export ALSA_CONFIG_PATH LIMBWATCH_RAW

head='station = { name = "Brackenfold"; };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; passband_nm = 120; }, { name = "gps"; column = 2; measure = "pulse"; } );'
cat > "$work/make.conf" <<END
$head
intake = { driver = "synthetic"; seed = 7; duration_s = 24; start_utc = "2031-04-02T01:23:30.25Z"; contact_s = 14.4; snr = 30;
  level = 0.02; passband_nm = 120; pulse = true; };
keep = { folder = "$work/made"; everything = true; free_mib = 0; };
END
run "$build/limbwatchd" --quiet --json --config "$work/make.conf"
frame=$("$python" -c 'import json,sys; print(json.loads(open(sys.argv[1]).readline())["frame"])' "$work/out")
sox "$work"/made/*.wav -t raw -e signed -b 24 -L "$work/raw"

cat > "$work/alsa.conf" <<END
$head
intake = { driver = "alsa"; device = "recorded"; rate_hz = 48000; channels = 2; format = "S24_3"; paced = false; };
clock = { host_sigma_s = 0.5; };
keep = { folder = "$work/kept"; free_mib = 0; };
END
run "$build/limbwatchd" --config "$work/alsa.conf" --check
[ "$status" -eq 0 ] && grep -q '2 channels of S24_3 samples at 48000 Hz' "$work/out"
ok $? "--check says what the device delivers"

# It never ends by itself: it is ended once the contact has been reported, or after a minute.
"$build/limbwatchd" --quiet --json --config "$work/alsa.conf" > "$work/json" 2> "$work/err" &
pid=$!
for _ in $(seq 600); do
	[ ! -s "$work/json" ] && kill -0 "$pid" 2> /dev/null || break
	sleep 0.1
done
kill -TERM "$pid"
wait "$pid"
ok $? "it ends cleanly when told to"
"$python" - "$work/json" "$frame" <<'END'
import json, sys
c = json.loads(open(sys.argv[1]).readline())
assert c["kind"] == "immersion" and c["verdict"] == "fringes confirmed", c
assert abs(c["frame"] - float(sys.argv[2])) < 1, (c["frame"], sys.argv[2])
END
ok $? "the contact stands at the same frame as in the recording itself"
