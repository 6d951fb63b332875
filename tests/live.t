#!/bin/sh
# The recorder live: what it shows to others, what the service manager hears, a new configuration, threads that stand still.
. tests/support/tap.sh
"$python" tests/support/live.py "$build/limbwatchd" "$work"
