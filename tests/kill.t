#!/bin/sh
# kill -9 at random instants loses at most a second, and nothing becomes unreadable.  Two hundred: make bench.
. tests/support/tap.sh
plan 1
run "$python" tests/bench/kill.py "$build" 8 1 4
sed 's/^/# /' "$work/out"
[ "$status" -eq 0 ]
ok $? "eight kills lose less than a second each and leave everything readable"
