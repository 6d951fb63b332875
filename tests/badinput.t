#!/bin/sh
# Bad input: one clear sentence, the right exit status, nothing lost, no crash.
. tests/support/tap.sh
plan 16
head='station = { name = "Brackenfold"; };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } );'

# config NAME INTAKE [KEEP]: writes a configuration.
config() {
	printf '%s\nintake = { %s };\nkeep = { %s };\n' "$head" "$2" "${3:-folder = \"$work/kept\"; free_mib = 0;}" > "$work/$1.conf"
}
record() { run timeout 60 "$build/limbwatchd" --json --config "$work/$1.conf"; }

sox -n -r 8000 -b 16 -c 1 "$work/good.wav" synth 4 whitenoise vol 0.2
: > "$work/empty.wav"
echo 'this is not a sound file, not at all, but it is long enough to be looked at' > "$work/text.wav"
head -c 20001 "$work/good.wav" > "$work/truncated.wav"
"$python" - "$work/nan.wav" <<'END'
import struct, sys
n, rate = 32000, 8000
data = struct.pack("<f", float("nan")) * n
open(sys.argv[1], "wb").write(b"RIFF" + struct.pack("<I", 50 + len(data)) + b"WAVEfmt " +
    struct.pack("<IHHIIHH", 16, 3, 1, rate, rate * 4, 4, 32) + b"fact" + struct.pack("<II", 4, n) +
    b"data" + struct.pack("<I", len(data)) + data)
END

config empty "driver = \"file\"; path = \"$work/empty.wav\";"
record empty
refused 1 'empty.wav' "an empty sound file is refused"
config text "driver = \"file\"; path = \"$work/text.wav\";"
record text
refused 1 'text.wav' "a file that is no sound file is refused"
config none "driver = \"file\"; path = \"$work/none.wav\";"
record none
refused 1 'none.wav' "a missing sound file is refused"
config folder "driver = \"file\"; path = \"$work\";"
record folder
refused 1 "$work" "a folder in the place of a sound file is refused"
config rate "driver = \"file\"; path = \"$work/good.wav\"; rate_hz = 48000;"
record rate
refused 2 '48000' "a sound file of another rate than the configured one is refused"
config truncated "driver = \"file\"; path = \"$work/truncated.wav\";" "folder = \"$work/cut\"; everything = true; free_mib = 0;"
record truncated
refused 1 'truncated.wav' "a truncated sound file is said"
frames=$("$python" -c 'import sys, wave; print(wave.open(sys.argv[1]).getnframes())' "$work"/cut/*.wav)
[ "$frames" -ge 9970 ] && [ "$frames" -le 9980 ]
ok $? "and everything before the cut is kept ($frames frames)"
config nan "driver = \"file\"; path = \"$work/nan.wav\";"
record nan
[ "$status" -eq 0 ] && [ ! -s "$work/out" ]
ok $? "a file full of NaN triggers nothing"
config alsa 'driver = "alsa"; device = "hw:77,0";'
run "$build/limbwatchd" --config "$work/alsa.conf" --check
refused 1 'hw:77,0' "a missing sound card is named"
run timeout -s TERM 1 "$build/limbwatchd" --config "$work/alsa.conf"
grep -q 'tried again until it is' "$work/err" && grep -q 'hw:77,0' "$work/err"
ok $? "and waited for by the recorder"
config pipe "driver = \"pipe\"; path = \"$work/nopipe\"; rate_hz = 8000; channels = 1; format = \"S16\";"
record pipe
refused 1 'nopipe' "a missing pipe is named"
config under "driver = \"file\"; path = \"$work/good.wav\";" "folder = \"$work/good.wav/kept\";"
record under
refused 1 'good.wav/kept' "a folder that cannot be made is refused before recording"
config column "driver = \"file\"; path = \"$work/good.wav\";"
sed -i 's/column = 1/column = 3/' "$work/column.conf"
record column
refused 2 'column 3' "a channel in a column the intake does not have is refused"
config slow "driver = \"file\"; path = \"$work/good.wav\";"
sed -i 's/wavelength_nm = 620/frequency_mhz = 1420; high_pass_hz = 1/' "$work/slow.conf"
record slow
refused 2 'AC-coupled' "an AC-coupled input for a slow edge is refused, with what is left of it"
printf 'intake = { driver = "file"; path = ' > "$work/broken.conf"
record broken
refused 2 'broken.conf' "a broken configuration is refused with file and line"

# The folder belongs to one recorder at a time.
config lock "driver = \"file\"; path = \"$work/good.wav\";"
mkdir -p "$work/kept"
run flock "$work/kept" "$build/limbwatchd" --config "$work/lock.conf"
refused 1 'in use by another' "a folder in use by another recorder is refused"
