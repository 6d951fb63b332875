#!/bin/sh
# The acquisition thread, once it runs, allocates nothing, takes no lock, touches no file: on the plain build, by a witness.
. tests/support/tap.sh
witness=$PWD/$build/tests/preload/witness.so
if [ ! -f "$witness" ]; then
	echo "1..0 # SKIP only on the plain build"
	exit 0
fi
plan 6

cat > "$work/live.conf" <<END
station = { name = "Brackenfold"; };
intake = { driver = "synthetic"; real_time_pace = true; pulse = true; duration_s = 9; contact_s = 4; snr = 40;
  start_utc = "2031-04-02T01:23:15.25Z"; };
channels = ( { name = "photodiode"; column = 1; wavelength_nm = 620; }, { name = "gps"; column = 2; measure = "pulse"; } );
expected = ( { source = "Anwen"; kind = "immersion"; utc = "2031-04-02T01:23:19.25Z"; sigma_s = 0.5; } );
keep = { folder = "$work/kept"; free_mib = 0; };
state = { socket = "$work/state.sock"; };
END
run env LD_PRELOAD="$witness" WITNESS="$work/seen" "$build/limbwatchd" --config "$work/live.conf" --json
sed 's/^/# /' "$work/seen"
[ "$status" -eq 0 ] && [ "$(grep -c '"source":"Anwen"' "$work/out")" -eq 1 ] && grep -q '^armed 1' "$work/seen"
ok $? "the recorder is watched while it catches a contact"
[ "$(sed -n 's/^readings //p' "$work/seen")" -gt 1500 ]
ok $? "from its start to its end"
grep -q '^allocations 0$' "$work/seen" && grep -q '^locks 0$' "$work/seen"
ok $? "the acquisition thread allocates nothing and takes no lock"
grep -q '^syscalls 0$' "$work/seen"
ok $? "it makes no system call but those that wait for the device"
# Without the privilege memory is not locked, and a page of the ring may still be mapped for the first time.
[ "$(sed -n 's/^faults //p' "$work/seen")" -le 8 ]
ok $? "it waits for no page of memory"

sed -i 's/duration_s = 9/duration_s = 5/' "$work/live.conf"
run env LD_PRELOAD="$witness" WITNESS="$work/seen" WITNESS_TEMPT=1 "$build/limbwatchd" --config "$work/live.conf" --json
[ "$(sed -n 's/^allocations //p' "$work/seen")" -eq 2 ] && grep -q '^locks 1$' "$work/seen" && grep -q '^syscalls 2$' "$work/seen"
ok $? "and the witness would have seen each of these"
