# same.pl RECORDING NOISE SECONDS: whether the recording holds SECONDS of the noise, repeated, from its first frame on, each
# sample as played.  Says where it differs, or how many frames are alike.
use strict;
use warnings;
my ($recording, $noise, $seconds) = @ARGV;
my ($block, $want, $done, $x, $y) = (192000, $seconds * 192000, 0);
open my $played, '<:raw', $noise or die "$noise: $!\n";
open my $kept, '<:raw', $recording or die "$recording: $!\n";

# The samples of a WAVE file begin behind the head of its data chunk.
read $kept, my $head, 12;
while (read($kept, $head, 8) == 8) {
	my ($id, $size) = unpack 'a4 V', $head;
	last if $id eq 'data';
	seek $kept, $size + ($size & 1), 1;
}
# Before the player begins, the card gives silence; no sample of the noise is zero.
my $at = tell $kept;
while (1) {
	read($kept, $x, $block) or die "nothing was played\n";
	if ($x =~ /[^\0]/) {
		$at += int($-[0] / 4) * 4;
		last;
	}
	$at += length $x;
}
seek $kept, $at, 0;
while ($done < $want) {
	my $n = $want - $done < $block ? $want - $done : $block;
	read $kept, $x, $n;
	my $got = read $played, $y, $n;
	if ($got < $n) {
		seek $played, 0, 0;
		read $played, $y, $n - $got, $got;
	}
	if ($x ne $y) {
		(($x ^ $y) =~ /[^\0]/);
		printf "differs after %d frames\n", ($done + ($-[0] // length $x)) / 4;
		exit 1;
	}
	$done += $n;
}
printf "%d frames as played\n", $done / 4;
