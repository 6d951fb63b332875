#!/bin/sh
# Segments of every sample type, read by others: sox and Python's wave (integers), sample for sample, and the bext chunk by hand.
. tests/support/tap.sh
plan 6
for format in S16 S24_3 S24 S32 FLOAT; do
	cat > "$work/$format.conf" <<-END
	station = { name = "Brackenfold"; };
	intake = { driver = "synthetic"; seed = 3; rate_hz = 8000; duration_s = 3; kind = "none"; noise_rms = 0.05; format = "$format"; pulse = true; };
	channels = ( { name = "diode"; column = 1; wavelength_nm = 620; } );
	keep = { folder = "$work/$format"; everything = true; free_mib = 0; };
	END
	run "$build/limbwatchd" --quiet --config "$work/$format.conf"
	sox "$work/$format"/*.wav -t f64 "$work/$format.f64" 2> "$work/err"
done
for format in S16 S24_3 S24 S32; do
	"$python" - "$work/$format.f64" "$work/$format"/*.wav "$work/FLOAT.f64" $format <<'END'
import sys, wave
import numpy as np
by_sox = np.fromfile(sys.argv[1])
with wave.open(sys.argv[2]) as w:
    width, n = w.getsampwidth(), w.getnframes()
    assert (w.getnchannels(), w.getframerate(), n) == (2, 8000, 24000)
    assert width == {"S16": 2, "S24_3": 3, "S24": 3, "S32": 4}[sys.argv[4]]
    raw = np.frombuffer(w.readframes(n), np.uint8).reshape(-1, width).astype(np.int64)
value = sum(raw[:, b] << 8 * b for b in range(width))
value -= (value >> (8 * width - 1) & 1) << 8 * width
by_wave = value / 2.0 ** (8 * width - 1)
# sox counts in 32 bits; both must be the same numbers, and those of the float recording of the same seed, rounded.
assert np.array_equal(by_sox, by_wave)
assert np.max(np.abs(by_wave - np.fromfile(sys.argv[3]))) <= 0.5001 / 2 ** (8 * width - 1) + 2.0 ** -25
END
	ok $? "$format: sox and wave agree on every sample"
done
[ "$(soxi -s "$work"/FLOAT/*.wav)" -eq 24000 ] && [ "$(soxi -e "$work"/FLOAT/*.wav)" = "Floating Point PCM" ]
ok $? "FLOAT is floating point for sox"
# EBU Tech 3285: bext after the RIFF head: description 256, originator 32, reference 32, date 10, time 8, time reference 8.
"$python" - "$work"/S16/*.wav <<'END'
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
