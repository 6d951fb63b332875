# Shell side of the scenes: claims, the recorder's log and state, the loopback card, the disks.  Sourced, never run.
# Times are the machine's, which leap over idle waits: a `sleep` here is so much recording, and costs next to nothing.
passed=0
failed=0
mark=0
marks=0
folder=/var/lib/limbwatch
config=/etc/limbwatch/limbwatch.conf
. /scene/truth

note() { echo "# $*"; }

# ok STATUS CLAIM
ok() {
	if [ "$1" -eq 0 ]; then
		passed=$((passed + 1))
		echo "ok - $2"
	else
		failed=$((failed + 1))
		echo "not ok - $2"
		said | tail -12 | sed 's/^/#   /'
	fi
}

# claim CLAIM COMMAND...: the command succeeds.
claim() {
	words=$1
	shift
	"$@" > /dev/null 2>&1
	ok $? "$words"
}

uptime_s() { cut -d' ' -f1 /proc/uptime; }
difference() { awk -v a="$1" -v b="$2" 'BEGIN { printf "%.3f", a - b }'; }
# within VALUE LOW HIGH
within() { awk -v x="$1" -v a="$2" -v b="$3" 'BEGIN { exit !(x != "" && x + 0 >= a + 0 && x + 0 <= b + 0) }'; }

# until_so SECONDS COMMAND...: waits until the command succeeds.
until_so() {
	end=$(awk -v t="$1" '{ print $1 + t }' /proc/uptime)
	shift
	until "$@" > /dev/null 2>&1; do
		within "$(uptime_s)" 0 "$end" || return 1
		sleep 0.5
	done
}

# ------------------------------------------------------------------ the recorder

# Followed all the time, because asking journal and socket anew costs this machine a second each.
follow() {
	: > /run/said
	journalctl -q -f -n 0 -o cat _SYSTEMD_UNIT=limbwatchd.service + UNIT=limbwatchd.service + SYSLOG_IDENTIFIER=scene \
		> /run/said &
	mkdir -p /run/state
	perl /scene/guest/follow.pl /run/limbwatch/state.sock /run/state &
}

# From here on `said` is what the recorder's log says.
from_here() {
	marks=$((marks + 1))
	journalctl --sync
	echo "mark $marks." | systemd-cat -t scene
	until_so 10 grep -q "^mark $marks\." /run/said
	mark=$(wc -l < /run/said)
}
said() { tail -n "+$((mark + 1))" /run/said; }
says() { said | grep -q -- "$1"; }
# heard PATTERN: soon, for the log takes its way.
heard() { until_so 5 says "$1"; }
# first_saying PATTERN: the first such line of the log, for the table of faults.
first_saying() {
	line=$(said | grep -m1 -- "$1" | sed 's/^limbwatchd: //; s/|/,/g' | cut -c1-150)
	echo "${line:-nothing}"
}

property() { systemctl show limbwatchd -p "$1" --value; }
pid() { property MainPID; }
active() { [ "$(property ActiveState)" = active ]; }
restarts() { property NRestarts; }

# state WHAT FILTER: the newest line of that kind on the state socket, through jq.
state() { jq -r "$2" "/run/state/$1"; }
# state_is WHAT MEMBER VALUE, both as they stand in the line
state_is() { grep -q "\"$2\":$3" "/run/state/$1" 2> /dev/null; }
recording() { state_is disk writing true && state_is device state '"running"'; }
# The state is a second old at most.
frames_lost() {
	sleep 1.2
	state device .frames_lost
}

# configure [WORDS]: a configuration for the loopback card; WORDS are further groups.  Variables may say otherwise for once:
# measure=pulse, watching=true, everything=false, clock='...'.
configure() {
	cat > $config <<-END
		station = { name = "Brackenfold"; };
		intake = { driver = "alsa"; device = "hw:Loopback,1,0"; rate_hz = 48000; channels = 2; format = "S16"; };
		channels = ( { name = "photodiode"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },
			{ name = "gps"; column = 2; measure = "${measure:-aux}"; } );
		watch = { outside_vigils = ${watching:-false}; vigil_before_s = 12; vigil_after_s = 6; };
		clock = { ${clock:-host_sigma_s = 0.05;} };
		keep = { folder = "$folder"; everything = ${everything:-true}; free_mib = 0; };
		$1
	END
}

# begin_recording: a fresh recorder on an empty folder, once it is at work.
begin_recording() {
	systemctl stop limbwatchd
	rm -f $folder/*.*
	from_here
	systemctl start limbwatchd && until_so 20 recording
}

# The newest sidecar, and what of it.
sidecar() { jq -r "$1" "$(ls -t $folder/*.json | head -1)"; }
gap_frames() { cat $folder/*.json | jq -s '[.[].gaps[].frames] | add // 0'; }

# Frames that are in none of the files, between the first one's begin and the last one's end.
missing_frames() {
	[ $# -gt 0 ] || set -- $folder/*.json
	cat "$@" | jq -s '[.[].parts[]] | sort_by(.first_frame)
		| reduce .[] as $p ({ end: .[0].first_frame, lost: 0 };
			{ lost: (.lost + ([0, $p.first_frame - .end] | max)), end: ([.end, $p.first_frame + $p.frames] | max) })
		| .lost'
}
# The same between the files of two recorders, by the host's clock: seconds.
missing_seconds() {
	cat $folder/*.json | jq -s 'sort_by(.boot.monotonic_ns) | .[1].boot.monotonic_ns * 1e-9 - .[0].boot.monotonic_ns * 1e-9
		- ([.[0].parts[].frames] | add) / 48000 | . * 100 | round / 100'
}

# row FAULT | WHAT HAPPENED | WHAT WAS SAID | FRAMES LOST
row() { printf '%s\n' "$*" >> /scene/faults; }

# ------------------------------------------------------------------ card and disks

# Where the recorder's end of the card is, and when, by the kernel itself: frames since it was started, nanoseconds.
card_clock() {
	awk '/^tstamp/ { t = $3 } /^hw_ptr/ { print $3, t * 1e9 }' OFMT=%.0f /proc/asound/Loopback/pcm1c/sub0/status
}
card() { echo snd_aloop.0 > "/sys/bus/platform/drivers/snd_aloop/$1"; }

# play MINUTES: the noise, without a break.
play() {
	minute=0
	while [ $minute -lt "$1" ]; do
		cat /scene/noise.raw
		minute=$((minute + 1))
	done | aplay -q -t raw -f S16_LE -r 48000 -c 2 --buffer-time=400000 -D hw:Loopback,0,0
}
# Without its reader the pipe ends, too.
stop_playing() {
	pkill -x aplay
	until_so 10 eval '! pgrep -x aplay'
}
# same_as_played FILE SECONDS: so much of the noise, sample for sample and without a break, is in the recording.
same_as_played() { perl /scene/guest/same.pl "$1" /scene/noise.raw "$2"; }

# disk NAME FIRST LENGTH: a part of the second disk that can be made to fail; MiB.
disk() { dmsetup create "$1" --table "0 $(($3 * 2048)) linear /dev/vdb $(($2 * 2048))"; }
# disk_becomes NAME TARGET...
disk_becomes() {
	disk=$1
	shift
	sectors=$(blockdev --getsz "/dev/mapper/$disk")
	dmsetup suspend --nolockfs "$disk" && dmsetup load "$disk" --table "0 $sectors $*" && dmsetup resume "$disk"
}
