# follow.pl SOCKET FOLDER: keeps the newest line of each kind from the recorder's state socket in FOLDER/KIND, and nothing
# while there is no recorder.
use strict;
use warnings;
use IO::Socket::UNIX;
my ($path, $folder) = @ARGV;
while (1) {
	my $socket = IO::Socket::UNIX->new(Peer => $path);
	while ($socket && defined(my $line = <$socket>)) {
		next if $line !~ /^\{"what":"(hello|device|clock|vigil|disk|latency|contact)"/;
		my $kind = $1;
		open my $out, '>', "$folder/.$kind" or die;
		print $out $line;
		close $out;
		rename "$folder/.$kind", "$folder/$kind";
	}
	unlink glob "$folder/*";
	select undef, undef, undef, 0.1;
}
