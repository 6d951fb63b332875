#!/bin/sh
# What `make install` puts where, and what systemd's own programs say of it.
. tests/support/tap.sh
plan 13
root=$work/root

# install_into PREFIX [ASSIGNMENT...]: into $root, quietly; the build is there already.
install_into() {
	prefix=$1
	shift
	run env -u MAKEFLAGS -u MAKELEVEL make -s install BUILD="$build" DESTDIR="$root" PREFIX="$prefix" "$@"
}

listing() { (cd "$root" && find . ! -type d -printf '%P %m\n' | LC_ALL=C sort); }

expected() {
	LC_ALL=C sort <<-END
		etc/limbwatch/limbwatch.conf 644
		$1/bin/limbwatch 755
		$1/lib/systemd/system/limbwatchd.service 644
		$1/lib/sysusers.d/limbwatch.conf 644
		$1/lib/tmpfiles.d/limbwatch.conf 644
		$1/lib/udev/rules.d/60-limbwatch.rules 644
		$1/sbin/limbwatchd 755
		$1/share/limbwatch/limbwatch.conf 644
	END
}

install_into /usr
[ "$status" -eq 0 ]
ok $? "make install succeeds"
expected usr > "$work/expected"
listing > "$work/found"
run diff "$work/expected" "$work/found"
cp "$work/out" "$work/err"
[ "$status" -eq 0 ]
ok $? "every file is in its place with its mode, and nothing else is"
cmp -s etc/limbwatch.conf "$root/etc/limbwatch/limbwatch.conf"
ok $? "the first installation leaves the sample as configuration"
run "$root/usr/bin/limbwatch" --version
[ "$status" -eq 0 ]
ok $? "the installed program runs"

echo "# mine" > "$root/etc/limbwatch/limbwatch.conf"
echo "# old" > "$root/usr/share/limbwatch/limbwatch.conf"
install_into /usr
[ "$status" -eq 0 ] && [ "$(cat "$root/etc/limbwatch/limbwatch.conf")" = "# mine" ]
ok $? "an existing configuration is left alone"
cmp -s etc/limbwatch.conf "$root/usr/share/limbwatch/limbwatch.conf"
ok $? "the sample beside it is renewed"

unit=$root/usr/lib/systemd/system/limbwatchd.service
grep -qx 'ExecStart=/usr/sbin/limbwatchd --config /etc/limbwatch/limbwatch.conf' "$unit" && ! grep -q '@[A-Z]*@' "$unit"
ok $? "the unit starts what was installed"

rm -rf "$root"
install_into /opt/limbwatch SYSCONFDIR=/opt/etc
[ "$status" -eq 0 ] && grep -qx 'ExecStart=/opt/limbwatch/sbin/limbwatchd --config /opt/etc/limbwatch/limbwatch.conf' \
	"$root/opt/limbwatch/lib/systemd/system/limbwatchd.service"
ok $? "the unit follows PREFIX and SYSCONFDIR"
[ -f "$root/opt/etc/limbwatch/limbwatch.conf" ] && [ ! -e "$root/etc" ] && [ ! -e "$root/usr" ]
ok $? "nothing lands outside PREFIX and SYSCONFDIR"

rm -rf "$root"
install_into /usr
# The unit's programs are looked for below the root given, and nowhere else.
mkdir -p "$root/bin" "$root/usr/bin"
install -m 755 /bin/true "$root/bin/kill"
for unit in sysinit.target basic.target shutdown.target local-fs.target multi-user.target modprobe@.service system.slice \
	-.slice; do
	printf '[Unit]\nDescription=there\n' > "$root/usr/lib/systemd/system/$unit"
done
printf '[Service]\nType=oneshot\nExecStart=/bin/kill\n' >> "$root/usr/lib/systemd/system/modprobe@.service"
run systemd-analyze --no-pager --man=false --root="$root" verify limbwatchd.service
cat "$work/out" >> "$work/err"
[ "$status" -eq 0 ] && ! grep -q 'limbwatchd' "$work/err"
ok $? "systemd-analyze verify has nothing to say of the unit"
run systemd-analyze --no-pager --root="$root" security --offline=true --threshold=18 limbwatchd.service
tail -2 "$work/out" | sed 's/^/# /'
[ "$status" -eq 0 ]
ok $? "systemd-analyze security: exposure 1.8 at the most"

mkdir -p "$root/etc"
run systemd-sysusers --root="$root"
grep -q '^limbwatch:' "$root/etc/passwd" && grep -q '^limbwatch:' "$root/etc/group"
ok $? "systemd-sysusers makes user and group"
run systemd-tmpfiles --root="$root" --create limbwatch.conf
[ "$(stat -c %a "$root/var/lib/limbwatch")" = 750 ]
ok $? "systemd-tmpfiles makes the folder of recordings, for the group to read"
