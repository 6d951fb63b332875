#!/bin/sh
# SPDX-License-Identifier: GPL-3.0-or-later
# Every fuzz target that is built reads its corpus, then the same mutations of it each time.  A crash, a sanitizer's
# report or an input that takes longer than 10 s fails; the last line says which mutation of which seed it was.
build=${BUILD:-build}
seed=20260402
mutations=${FUZZ_MUTATIONS:-4000}
number=0

set -- "$build"/tests/fuzz/fuzz_*
for program; do
	case $program in *.[od]) continue ;; esac
	[ -x "$program" ] || continue
	name=${program##*/fuzz_}
	number=$((number + 1))
	log=$(mktemp)
	if "$program" tests/fuzz/corpus/"$name"/* >"$log" 2>&1; then
		echo "ok $number - $name: corpus"
	else
		tail -n 30 "$log" | sed 's/^/# /'
		echo "not ok $number - $name: corpus"
	fi
	number=$((number + 1))
	if "$program" --mutate $seed "$mutations" tests/fuzz/corpus/"$name"/* >"$log" 2>&1; then
		echo "ok $number - $name: $mutations mutations, seed $seed"
	else
		tr '\r' '\n' <"$log" | tail -n 30 | sed 's/^/# /'
		echo "not ok $number - $name: $mutations mutations, seed $seed"
	fi
	rm -f "$log"
done
[ "$number" -gt 0 ] || { number=1; echo "not ok 1 - no fuzz target is built in $build/tests/fuzz"; }
echo "1..$number"
