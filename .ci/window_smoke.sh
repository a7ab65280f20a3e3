#!/bin/sh
# Opens a real window on a job under Xvfb, waits for the result, clicks through the five stages
# and takes a picture of each, which must not be blank and must differ from the one before.
#
# usage: .ci/window_smoke.sh [BINARY] [JOB] [FOLDER FOR PICTURES]
# needs: xvfb xdotool imagemagick and the libraries the window loads (see README.md)
set -eu

binary=${1:-target/release/truewidth}
job=${2:-sample-scans/stamp-14.toml}
pictures=${3:-target/window-smoke}
number=${WINDOW_SMOKE_DISPLAY:-77}
width=1280
height=800

mkdir -p "$pictures"
data=$(mktemp -d)
printf 'theme = "dark"\n' >"$data/settings.toml"

screen=
program=
finish() {
    [ -z "$program" ] || kill "$program" 2>/dev/null || true
    [ -z "$screen" ] || kill "$screen" 2>/dev/null || true
    rm -rf "$data"
}
trap finish EXIT INT TERM

if [ ! -e "/tmp/.X11-unix/X$number" ]; then
    Xvfb ":$number" -screen 0 1920x1080x24 -nolisten tcp >"$pictures/xvfb.log" 2>&1 &
    screen=$!
    tries=0
    until [ -e "/tmp/.X11-unix/X$number" ]; do
        tries=$((tries + 1))
        [ "$tries" -lt 100 ] || { echo "window: Xvfb did not start" >&2; exit 1; }
        sleep 0.1
    done
fi
export DISPLAY=":$number"
unset WAYLAND_DISPLAY || true
TRUEWIDTH_DATA=$data "$binary" "$job" >"$pictures/program.log" 2>&1 &
program=$!

# The title is "truewidth – NAME – computing" until the result is there.
window=
tries=0
while :; do
    kill -0 "$program" 2>/dev/null || { echo "window: the program ended" >&2; cat "$pictures/program.log" >&2; exit 1; }
    [ -n "$window" ] || window=$(xdotool search --pid "$program" --name truewidth 2>/dev/null | head -n 1)
    if [ -n "$window" ]; then
        title=$(xdotool getwindowname "$window")
        case "$title" in
        *" – computing") ;;
        *" – "*) break ;;
        esac
    fi
    tries=$((tries + 1))
    [ "$tries" -lt 600 ] || { echo "window: no result after two minutes" >&2; exit 1; }
    sleep 0.2
done
xdotool windowmove "$window" 0 0 windowsize "$window" "$width" "$height" windowfocus "$window"
sleep 1

before=
index=0
for stage in scan tip surface dimensions record; do
    # Stages are 150 points wide with 14 between them, from 12 points at the left.
    xdotool mousemove $((87 + index * 164)) 29 click 1
    sleep 1
    picture="$pictures/$((index + 1))-$stage.png"
    import -window "$window" "$picture"
    set -- $(identify -format '%[fx:round(1000*standard_deviation)] %k' "$picture")
    [ "$1" -ge 20 ] && [ "$2" -ge 60 ] || {
        echo "window: the picture of $stage is blank (deviation $1/1000, $2 colours)" >&2
        exit 1
    }
    if [ -n "$before" ]; then
        differing=$(compare -metric AE "$before" "$picture" null: 2>&1 || true)
        [ "${differing%%.*}" != 0 ] || { echo "window: $stage looks like the stage before it" >&2; exit 1; }
    fi
    before=$picture
    index=$((index + 1))
done
kill -0 "$program" 2>/dev/null || { echo "window: the program ended" >&2; exit 1; }
echo "window: five stages painted, pictures in $pictures"
