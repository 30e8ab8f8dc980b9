#!/bin/sh
# Runs tarecup on every port of a folder, for any harness that makes such folders:
# names that begin with bal or pan are balances, with drop or cup counters.
#
#   tarecup.sh PROGRAM PORTS STATE MQTT [LEDGER] [more words for `tarecup run`]
#
#   PROGRAM  the tarecup to run      PORTS  the folder      STATE  its state folder, made if missing
#   MQTT     host:port               LEDGER a path that becomes a link to the ledger ('' for none)
#
# Written with little more than the shell's own words, so that the start of the
# program is what a measured start consists of.
set -eu
if [ $# -lt 4 ]; then
    echo "tarecup.sh: say PROGRAM PORTS STATE MQTT, perhaps LEDGER and more words for tarecup run" >&2
    exit 2
fi
program=$1 ports=$2 state=$3 mqtt=$4 ledger=${5:-}
shift 4
[ $# -eq 0 ] || shift

mkdir -p "$state"
state=$(cd "$state" && pwd)
[ -z "$ledger" ] || ln -sfn "$state/ledger.sqlite" "$ledger"

instrument() { # name kind bench profile
    printf '\n[[instrument]]\nname = "%s"\nkind = "%s"\nbench = "%s"\nport = "%s"\nprofile = "%s"\n' "$1" "$2" "$3" "$ports/$1" "$4"
}

{
    printf '[lab]\nname = "Measurement"\nstation = "bench"\n\n[mqtt]\nurl = "mqtt://%s"\n' "$mqtt"
    first=
    for path in "$ports"/*; do
        name=${path##*/}
        case $name in bal* | pan*)
            printf '\n[[bench]]\nname = "at-%s"\n' "$name"
            [ -n "$first" ] || first=at-$name
            ;;
        esac
    done
    [ -n "$first" ] || { first=bench-1 && printf '\n[[bench]]\nname = "bench-1"\n'; }
    for path in "$ports"/*; do
        name=${path##*/}
        case $name in
        bal* | pan*)
            instrument "$name" balance "at-$name" signed-steady
            printf 'steady_readings = 8\nsteady_span_g = 0.002\nload_from_g = 0.5\nchange_from_g = 0.05\n'
            ;;
        drop* | cup*) instrument "$name" counter "$first" running-total ;;
        esac
    done
} >"$state/bench.toml"
exec "$program" run --config "$state/bench.toml" --state "$state" "$@"
