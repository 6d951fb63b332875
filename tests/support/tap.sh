# Shell side of TAP for tests/*.t: plan, ok, run, refused.  Sourced, never run.
build=${BUILD:-build}
python=${PYTHON:-/usr/bin/python3}
count=0
work=$(mktemp -d "${TMPDIR:-/tmp}/limbwatch-test-XXXXXX")
trap 'rm -rf "$work"' EXIT

plan() { echo "1..$1"; }

# ok STATUS CLAIM: one test.
ok() {
	count=$((count + 1))
	if [ "$1" -eq 0 ]; then
		echo "ok $count - $2"
	else
		echo "not ok $count - $2"
		[ ! -f "$work/err" ] || sed 's/^/# /' "$work/err"
	fi
}

# run COMMAND...: standard output in $work/out, standard error in $work/err, status in $status.
run() {
	status=0
	"$@" > "$work/out" 2> "$work/err" < /dev/null || status=$?
}

# refused STATUS WORDS CLAIM: the last run ended with STATUS and said WORDS (a basic regular expression), no sanitizer spoke.
refused() {
	[ "$status" -eq "$1" ] && grep -q -- "$2" "$work/err" && ! grep -qE 'Sanitizer|runtime error' "$work/err"
	ok $? "$3"
}
