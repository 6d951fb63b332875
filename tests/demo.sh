#!/bin/sh
# The main job on an invented scenario, in plain words: run by `make demo`.
set -eu
build=${BUILD:-build}
folder=$build/demo
rm -rf "$folder"
mkdir -p "$folder"

echo
echo "== 1. An invented evening through the real recorder"
echo
"$build/limbwatch" rehearse --snr 50 --folder "$folder"

segment=$(ls "$folder"/*.wav)
cat > "$folder/replay.conf" <<END
# The recording just made, replayed as a sound file without any prediction.
station  = { name = "Brackenfold"; };
intake   = { driver = "file"; path = "$segment"; bext_sigma_s = 0.05; };
channels = (
  { name = "photodiode"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },
  { name = "gps"; column = 2; measure = "pulse"; } );
keep     = { folder = "$folder/replayed"; };
END
echo
echo "== 2. The recording just made, replayed from the file without any prediction"
echo
"$build/limbwatchd" --config "$folder/replay.conf"
echo
echo "Recordings are in $folder; $folder/replay.conf is a configuration to play with."
