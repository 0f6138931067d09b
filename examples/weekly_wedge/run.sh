#!/usr/bin/env bash
# A calibration run once a week, and what has changed since the last one.
# Usage: run.sh [FOLDER] [ROWS COLUMNS]; everything here is invented.
set -eu

here=$(cd "$(dirname "$0")" && pwd)
out=${1:-weekly-wedge}
size=()
if [ $# -ge 3 ]; then
    size=(--pixels "$2" "$3")
fi
mkdir -p "$out"

for week in last_week this_week; do
    # in the laboratory the scan comes from the detector; here a virtual one counts it
    wedgewright simulate "$here/$week.toml" -o "$out/$week.h5" \
        --truth "$out/$week.truth.h5" ${size[@]+"${size[@]}"}
    # ends with 1, and so ends this script, if the scan is not fit for use
    wedgewright check "$out/$week.h5" | tee "$out/$week.check.txt"
    wedgewright calibrate "$out/$week.h5" -o "$out/$week.calibration.h5" \
        | tee "$out/$week.calibrate.txt"
done

wedgewright compare "$out/last_week.calibration.h5" "$out/this_week.calibration.h5" \
    -o "$out/changes.html" | tee "$out/changes.txt"
python "$here/picture.py" "$out"
