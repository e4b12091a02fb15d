#!/bin/sh
# Makes the example bands anew: for each grade a simulated line of 24 bars, all of that grade, each line with a seed of
# its own, is taught through the same code as a recording. About ten minutes. Run it when the sight, the figures or
# the teaching have changed, and look at what changed in the files before they are committed.
#   sh calib/make-bands.sh [GRADE...]
set -eu
top=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
edgewatch=${EDGEWATCH:-$top/.venv/bin/edgewatch}
folder=$(mktemp -d)
trap 'rm -rf "$folder"' EXIT
trap 'exit 130' INT
trap 'exit 143' TERM

[ $# -gt 0 ] || set -- C15 C45 C80 42CrMo4
for grade in "$@"; do
    case $grade in # never the seeds that rehearsals begin with: a band is not judged on what it was taught from
        C15) seed=1015 ;;
        C45) seed=1045 ;;
        C80) seed=1080 ;;
        42CrMo4) seed=1042 ;;
        *) seed=1000 ;;
    esac
    {
        cat "$top/calib/optics.toml"
        printf '\n[rehearsal]\ngrade = "%s"\nseed = %s\nbars = 24\nforeign = 0\nforeign_grades = []\n' "$grade" "$seed"
    } >"$folder/line.toml"
    "$edgewatch" teach "$grade" rehearsal: --station "$folder/line.toml" --out "$top/calib/bands/$grade.toml"
done
