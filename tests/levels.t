#!/bin/sh
# limbwatch levels: on a synthetic event, on sound files, attached to a recorder's state socket, on a terminal.
. tests/support/tap.sh
plan 30
levels="timeout 60 $build/limbwatch levels"
channels='channels = ( { name = "photodiode"; column = 1; wavelength_nm = 620; },
	{ name = "gps"; column = 2; measure = "pulse"; } );'

# config NAME INTAKE [CHANNELS]: writes a configuration.
config() {
	printf 'station = { name = "Brackenfold"; };\nintake = { %s };\n%s\nkeep = { folder = "%s"; };\nstate = { socket = "%s"; };\n' \
		"$2" "${3:-$channels}" "$work/kept" "$work/state.sock" > "$work/$1.conf"
}
# says WORDS: on standard output of the last run.
says() { grep -q -- "$1" "$work/out"; }
# json EXPRESSION CLAIM: true of the last line of standard output, as r; c is its first channel.
json() {
	tail -n 1 "$work/out" | "$python" -c 'import json, sys
r = json.loads(sys.stdin.readline()); c = r["channels"][0]; p = r["pulse"]
sys.exit(not ('"$1"'))' 2>> "$work/err"
	ok $? "$2"
}

# ---------------------------------------------------------------- a synthetic event and sound files, once at the end

config synthetic 'driver = "synthetic"; duration_s = 30; kind = "none"; pulse = true; hum_rms = 0.01; clock_error_ppm = 23.4;'
run $levels --config "$work/synthetic.conf"
[ "$status" -eq 0 ] && says '^photodiode .* normal ' && says '30 pulses seen, 0 missing, 0 spurious' && says '^gps .* rising ' &&
	says '^! photodiode: hum 50 Hz' && [ "$(grep -c '^channel ' "$work/out")" -eq 1 ]
ok $? "a synthetic event gives one table at its end"
! awk 'length($0) > 100' "$work/out" | grep -q . && ! grep -q "$(printf '\033')" "$work/out"
ok $? "it is within 100 columns, without escape sequences in a file"

run $levels --config "$work/synthetic.conf" --json
[ "$status" -eq 0 ] && [ "$(wc -l < "$work/out")" -eq 1 ]
ok $? "--json gives one line"
json 'r["what"] == "levels" and abs(c["whole"]["mean_fs"] - 0.3) < 1e-3 and abs(c["noise"][0]["allan_fs"] - 0.01) < 2e-4' \
	"with the level and the noise it was made with"
json 'abs(p["card_error_ppm"] - 23.4) < 0.05 and p["interval_rms_us"] < 0.2 and p["seen"] == 30' \
	"with the card's error and the pulse's regularity"
json 'c["mains"]["fundamental_hz"] == 50 and abs(c["mains"]["amplitudes_fs"][0] / 0.01 / 2**0.5 - 1) < 0.05' \
	"with the hum it was made with"
run $levels --config "$work/synthetic.conf" --json --seconds 2.5
json 'r["frames"] in range(119000, 120001)' "--seconds ends a replay early"

# numpy on the same samples: mean, rms and the Allan deviation of 64 samples.
"$python" - "$work/noise.wav" "$work/noise.txt" <<'END'
import sys, wave, numpy as np
rng = np.random.default_rng(7)
n = 8000 * 16 // 256 * 256
x = np.clip(np.rint(32768 * (0.2 + 0.05 * rng.standard_normal(n) + 0.02 * np.sin(2 * np.pi * 60 * np.arange(n) / 8000))),
            -32768, 32767).astype("<i2")
w = wave.open(sys.argv[1], "wb"); w.setparams((1, 2, 8000, 0, "NONE", "")); w.writeframes(x.tobytes()); w.close()
y = x / 32768.0
a = y.reshape(-1, 64).mean(1)
open(sys.argv[2], "w").write("%.9g %.9g %.9g" % (y.mean(), y.std(), np.sqrt(0.5 * np.mean(np.diff(a) ** 2))))
END
config alone 'driver = "alsa"; device = "hw:77,0"; rate_hz = 48000;' 'channels = ( { name = "photodiode"; column = 1; wavelength_nm = 620; } );'
run $levels --config "$work/alone.conf" --file "$work/noise.wav" --json
read -r mean rms allan < "$work/noise.txt"
json "all(abs(a / b - 1) < 1e-5 for a, b in ((c['whole']['mean_fs'], $mean), (c['whole']['rms_fs'], $rms),
	([o for o in c['noise'] if o['samples'] == 64][0]['allan_fs'], $allan)))" "a sound file has the numbers that numpy finds"
json 'c["mains"]["fundamental_hz"] == 60 and p["channel"] == -1' "60 Hz is told from 50 Hz"
sox -n -r 8000 -b 16 -c 1 "$work/loud.wav" synth 3 sine 440 gain 6 2> /dev/null
run $levels --config "$work/alone.conf" --file "$work/loud.wav"
[ "$status" -eq 0 ] && says '^! photodiode: clipped: lower the gain'
ok $? "clipping is said"

# ---------------------------------------------------------------- wrong arguments and files

run $levels --config "$work/alone.conf" --seconds 0
refused 2 'seconds: 0 is not' "seconds out of range are refused"
run $levels --config "$work/alone.conf" "$work/noise.wav"
refused 2 'given as --file' "a file without its option is refused"
run $levels --attach --file "$work/noise.wav"
refused 2 'only one of them' "--attach and --file together are refused"
run $levels --config "$work/alone.conf" --file "$work/none.wav"
refused 1 'none.wav' "a missing sound file is said"
echo 'this is not a sound file, not at all, but it is long enough to be looked at' > "$work/text.wav"
run $levels --config "$work/alone.conf" --file "$work/text.wav"
refused 1 'text.wav' "a file that is no sound file is said"
run $levels --config "$work/synthetic.conf" --file "$work/noise.wav"
refused 2 'column 2' "a channel that the file has not is said"
run $levels --config "$work/none.conf"
refused 2 'none.conf' "a missing configuration is said"

# ---------------------------------------------------------------- attached to a recorder

# recorder LINES COMMAND...: a recorder that says the lines in the file and, unless the last is "stay", goes away.
cat > "$work/recorder.py" <<'END'
import os, socket, subprocess, sys
path, lines, command = sys.argv[1], open(sys.argv[2], "rb").read(), sys.argv[3:]
stay = lines.endswith(b"stay\n")
lines = lines[:-5] if stay else lines
if os.path.exists(path):
    os.unlink(path)
s = socket.socket(socket.AF_UNIX); s.bind(path); s.listen(4)
child = subprocess.Popen(command)
s.settimeout(60)
peer, _ = s.accept()
try:
    for k in range(0, len(lines), 1000):        # lines come in pieces
        peer.sendall(lines[k:k + 1000])
except (BrokenPipeError, ConnectionResetError):
    pass
if not stay:
    peer.close()
status = child.wait()
os.unlink(path)
sys.exit(status)
END
recorder() {
	lines=$1
	shift
	run "$python" "$work/recorder.py" "$work/state.sock" "$lines" "$@"
}
$levels --config "$work/synthetic.conf" --json > "$work/line"
other='{"what":"hello","station":"Brackenfold"}
{"what":"device","state":"running","name":"hw:1,0"}
{"what":"vigil","open":null}'
{ echo "$other"; cat "$work/line" "$work/line"; } > "$work/twice"
recorder "$work/twice" $levels --attach --socket "$work/state.sock"
refused 1 'has ended or closed the connection' "the end of the recorder is said"
says 'recorder of Brackenfold, which holds hw:1,0' && [ "$(grep -c '^channel ' "$work/out")" -eq 2 ]
ok $? "each of its lines about levels is a table, the others are passed over"
{ cat "$work/twice"; echo stay; } > "$work/staying"
recorder "$work/staying" $levels --config "$work/alone.conf" --attach --json --seconds 1
[ "$status" -eq 0 ] && [ "$(wc -l < "$work/out")" -eq 2 ] && tail -n 1 "$work/out" | cmp -s - "$work/line"
ok $? "attached by the configuration's socket, --json passes the lines on"
recorder "$work/staying" $levels --config "$work/alone.conf" --seconds 1
[ "$status" -eq 0 ] && grep -q 'recorder is running and holds the alsa intake: attached' "$work/err" && says 'which holds hw:1,0'
ok $? "without options a running recorder is attached to, for it holds the device"
printf '%s\n{"what":"levels","rate_hz":48000,"channels":[{"name":"\\u001b[2J","measure":"aux"}]}\n' "$other" > "$work/evil"
recorder "$work/evil" $levels --attach --socket "$work/state.sock"
refused 1 'is not understood: a channel has no proper "name"' "a hostile line is refused"
head -c 300000 /dev/zero | tr '\0' x > "$work/long"
recorder "$work/long" $levels --attach --socket "$work/state.sock"
refused 1 'a line of more than' "an endless line is refused"
printf '{"what":"full"}\nstay\n' > "$work/full"
recorder "$work/full" $levels --attach --socket "$work/state.sock"
refused 1 'as many readers as it takes' "a recorder with too many readers is said"
printf '%s\nstay\n' "$other" > "$work/mute"
recorder "$work/mute" $levels --attach --socket "$work/state.sock" --seconds 0.5
refused 1 'said nothing of levels' "a recorder that says nothing of levels is said"
run $levels --config "$work/alone.conf" --attach
refused 1 "no recorder answers at $work/state.sock" "no recorder is said"

# ---------------------------------------------------------------- the intake itself, and a terminal

config pipe 'driver = "pipe"; path = "-"; rate_hz = 8000; channels = 1; format = "S16";' \
	'channels = ( { name = "photodiode"; column = 1; wavelength_nm = 620; } );'
status=0
tail -c +45 "$work/noise.wav" | $levels --config "$work/pipe.conf" > "$work/out" 2> "$work/err" || status=$?
[ "$status" -eq 0 ] && says '16.0 s at 8000 Hz'
ok $? "without a recorder the intake is opened, and its end shown"
cat > "$work/terminal.py" <<'END'
# Runs a command on a terminal of some size; does what is said as blocks come; prints what is wrong.
import os, pty, re, select, signal, struct, fcntl, sys, termios, time
how, rows, columns, command = sys.argv[1], int(sys.argv[2]), int(sys.argv[3]), sys.argv[4:]
pid, fd = pty.fork()
if pid == 0:
    os.environ["TERM"] = "xterm"
    os.read(0, 1)                               # until the size is set
    os.execvp(command[0], command)
fcntl.ioctl(fd, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))
before = termios.tcgetattr(fd)
os.write(fd, b"\n")
out, did, end = b"", False, time.monotonic() + 60
while True:
    ready, _, _ = select.select([fd], [], [], max(0, end - time.monotonic()))
    if not ready:
        os.kill(pid, signal.SIGKILL)
        sys.exit("nothing came")
    try:
        data = os.read(fd, 65536)
    except OSError:
        break
    if not data:
        break
    out += data
    if not did and out.count(b"\x1b[J") >= 2:
        did = True
        if how == "ctrl-c":
            os.write(fd, b"\x03")
        elif how == "term":
            os.kill(pid, signal.SIGTERM)
        elif how == "ctrl-z":
            os.write(fd, b"\x1a")
            if not os.WIFSTOPPED(os.waitpid(pid, os.WUNTRACED)[1]):
                sys.exit("it did not stop")
            while not out.endswith(b"\x1b[?25h"):
                out += os.read(fd, 65536)
            os.kill(pid, signal.SIGCONT)
            os.kill(pid, signal.SIGTERM)
if termios.tcgetattr(fd) != before:
    sys.exit("the terminal was changed")
status = os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])
hides, shows = out.count(b"\x1b[?25l"), out.count(b"\x1b[?25h")
if status or hides != shows or out.rfind(b"\x1b[?25h") < out.rfind(b"\x1b[?25l") or not hides:
    sys.exit("status %d, cursor hidden %d times, shown %d times" % (status, hides, shows))
if how == "ctrl-z" and hides != 2:
    sys.exit("the cursor was not given back while stopped")
ups = [int(n) for n in re.findall(rb"\x1b\[(\d+)A", out)]
if not ups or max(ups) >= rows:
    sys.exit("the cursor went up by %r in %d rows" % (ups, rows))
block = out.split(b"\x1b[J")[1]
lines = re.sub(rb"\x1b\[[?0-9;]*[A-Za-z]|\r", b"", block).decode().splitlines()
if max(map(len, lines)) > columns or not lines[0].startswith("limbwatch levels:"):
    sys.exit("a block of %d columns that begins with %r" % (max(map(len, lines)), lines[0]))
below = re.sub(rb"\x1b\[[?0-9;]*[A-Za-z]|\r|\n|\^C|\^Z", b"", out[out.rfind(b"\x1b[J"):])
if below:
    sys.exit("below the last block stands %r" % below)
END
config live 'driver = "synthetic"; real_time_pace = true; duration_s = 50; rate_hz = 8000; kind = "none"; pulse = true;'
# on_terminal HOW ROWS COLUMNS: at the same time, as each takes seconds.
on_terminal() { timeout 60 "$python" "$work/terminal.py" "$@" "$build/limbwatch" levels --config "$work/live.conf" 2> "$work/$1.err"; }
# ended HOW PROCESS CLAIM
ended() {
	status=0
	wait "$2" || status=$?
	cp "$work/$1.err" "$work/err"
	ok "$status" "$3"
}
on_terminal ctrl-c 40 120 & first=$!
on_terminal ctrl-z 40 120 & second=$!
on_terminal term 8 50 & third=$!
ended ctrl-c "$first" "on a terminal it refreshes in place and ends cleanly at Ctrl-C, the cursor as it was"
ended ctrl-z "$second" "Ctrl-Z gives the cursor back"
ended term "$third" "a small terminal gets as much as it holds, and SIGTERM ends it cleanly"
