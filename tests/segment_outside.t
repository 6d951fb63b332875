#!/bin/sh
# SPDX-License-Identifier: GPL-3.0-or-later
# Segments of every sample type as other programs read them: sox, and for the integers the wave module of Python.  Both
# give the samples that went in by a pipe.  (Of FLOAT sox remarks that the fmt chunk has no extension; it needs none.)
. tests/support/tap.sh
plan 12

# 3 s of two channels at 8 kHz: numbers that touch every byte, full scale among them.
make_samples() {
	"$python" - "$1" "$2" <<'END'
import sys, numpy as np
form, out = sys.argv[1:]
rng = np.random.default_rng(20260402)
bits = {"S16": 16, "S24_3": 24, "S24": 24, "S32": 32, "FLOAT": 0}[form]
if form == "FLOAT":
    rng.uniform(-1, 1, 48000).astype("<f4").tofile(out)
    sys.exit()
x = rng.integers(-2 ** (bits - 1), 2 ** (bits - 1), 48000, dtype=np.int64)
x[:4] = [-2 ** (bits - 1), 2 ** (bits - 1) - 1, 1, -1]
if form == "S16":
    x.astype("<i2").tofile(out)
elif form == "S24_3":
    open(out, "wb").write(x.astype("<i4").view("u1").reshape(-1, 4)[:, :3].tobytes())
elif form == "S24":
    b = x.astype("<i4").view("u1").reshape(-1, 4).copy()
    b[:, 3] = rng.integers(0, 256, 48000)           # junk in the byte that is not used
    open(out, "wb").write(b.tobytes())
else:
    x.astype("<i4").tofile(out)
END
}

compare() {
	"$python" - "$@" <<'END'
import sys, wave, numpy as np
form, raw, segment, sox = sys.argv[1:]
wanted = open(raw, "rb").read()
if form == "S24":
    wanted = b"".join(wanted[k:k + 3] for k in range(0, len(wanted), 4))
if form == "FLOAT":                                 # sox counts in 32-bit integers inside
    error = np.abs(np.fromfile(sox, "<f4").astype(float) - np.frombuffer(wanted, "<f4"))
    assert error.size == 48000 and error.max() <= 2.0 ** -24, error.max()
else:
    assert open(sox, "rb").read() == wanted, "sox reads other samples"
if form != "FLOAT":                                 # wave knows integers only
    w = wave.open(segment)
    assert (w.getnchannels(), w.getframerate(), w.getnframes()) == (2, 8000, 24000), w.getparams()
    assert w.getsampwidth() == {"S16": 2, "S24_3": 3, "S24": 3, "S32": 4}[form]
    assert w.readframes(24000) == wanted, "wave reads other samples"
END
}

for format in S16 S24_3 S24 S32 FLOAT; do
	make_samples $format "$work/$format.raw"
	cat > "$work/$format.conf" <<END
station = { name = "Brackenfold"; };
intake = { driver = "pipe"; path = "-"; rate_hz = 8000; channels = 2; format = "$format"; };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } );
keep = { folder = "$work/$format"; everything = true; };
END
	status=0
	"$build/limbwatchd" --config "$work/$format.conf" < "$work/$format.raw" > "$work/out" 2> "$work/err" || status=$?
	[ "$status" -eq 0 ] && [ "$(find "$work/$format" -name '*.wav' | wc -l)" -eq 1 ]
	ok $? "$format: one segment is recorded from the pipe"

	readers="sox and wave read the samples that went in, bit for bit"
	segment=$(find "$work/$format" -name '*.wav')
	case $format in
	FLOAT) encoding="-e float -b 32" readers="sox reads the samples that went in to its own 2^-24" ;;
	S24*) encoding="-e signed -b 24" ;;
	*) encoding="-e signed -b ${format#S}" ;;
	esac
	sox "$segment" -t raw $encoding -L "$work/sox.raw" 2> "$work/err"
	compare $format "$work/$format.raw" "$segment" "$work/sox.raw" 2>> "$work/err" &&
		! grep -v 'missing extended part of fmt chunk' "$work/err" | grep -qi warn
	ok $? "$format: $readers"
done
[ "$(soxi -s "$work"/FLOAT/*.wav 2> /dev/null)" -eq 24000 ] &&
	[ "$(soxi -e "$work"/FLOAT/*.wav 2> /dev/null)" = "Floating Point PCM" ]
ok $? "FLOAT is floating point for sox"

cat > "$work/bext.conf" <<END
station = { name = "Brackenfold"; };
intake = { driver = "synthetic"; seed = 3; rate_hz = 8000; duration_s = 3; kind = "none"; noise_rms = 0.05; pulse = true;
  start_utc = "2031-04-02T01:23:15.25Z"; };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } );
keep = { folder = "$work/bext"; everything = true; };
END
run "$build/limbwatchd" --quiet --config "$work/bext.conf"
# EBU Tech 3285: description 256 bytes, originator 32, reference 32, date 10, time 8, samples since midnight 8.
"$python" - "$work"/bext/*.wav <<'END'
import struct, sys
data = open(sys.argv[1], "rb").read()
at = data.index(b"bext") + 8
assert data[at + 256:at + 288].rstrip(b"\0") == b"Brackenfold"
date, time = data[at + 320:at + 330], data[at + 330:at + 338]
assert (date, time) == (b"2031-04-02", b"01:23:15"), (date, time)
low, high = struct.unpack("<II", data[at + 338:at + 346])
assert abs((high << 32 | low) - (((1 * 60 + 23) * 60 + 15.25) * 8000)) < 1, (low, high)
END
ok $? "bext names station, date, time and samples since midnight"
