#!/bin/sh
# The whole tool on an invented island: theory, paths, verdict; then a spec with faults, and a tampered ensemble.
set -eu
cd "$(dirname "$0")/.."
sh tests/venv.sh
unset PYTHONDONTWRITEBYTECODE  # or each command compiles the package for itself
procgen=.venv/bin/procgen
out=build/demo
rm -rf "$out"
mkdir -p "$out"
began=$(date +%s)

say() { printf '\n== %s\n' "$1"; }

# expect CODE COMMAND...: runs the command and stops the demo unless it ends with that exit code.
expect() {
    wanted=$1
    shift
    code=0
    "$@" || code=$?
    if [ "$code" -ne "$wanted" ]; then
        echo "demo: expected exit code $wanted, got $code from: $*" >&2
        exit 1
    fi
}

say "1. What the spec says: procgen theory demo/island.yaml"
$procgen theory demo/island.yaml > "$out/theory.txt"
sed -n '/^power_kw\[t\]/,/^$/p; /^power_kw (kW)/,/^$/p' "$out/theory.txt"
echo "... (all of it: $out/theory.txt)"

say "2. 2,000 paths of 2,000 hours: procgen render demo/island.yaml -o $out/island"
$procgen render demo/island.yaml -o "$out/island"

say "3. Do the paths follow the spec? procgen validate $out/island --report $out/verdict.html"
expect 0 $procgen validate "$out/island" --report "$out/verdict.html" > "$out/verdict.txt"
sed -n '1,4p' "$out/verdict.txt"
echo "... (all of it: $out/verdict.txt)"

say "4. A spec with faults: procgen theory demo/fault.yaml"
expect 2 $procgen theory demo/fault.yaml 2>&1

say "5. A copy with one series changed: procgen validate $out/tampered --report $out/refused.html"
cp -R "$out/island" "$out/tampered"
.venv/bin/python demo/tamper.py "$out/tampered" water_m3
expect 1 $procgen validate "$out/tampered" --report "$out/refused.html" > "$out/refused.txt"
sed -n '1,16p' "$out/refused.txt"
echo "... (all of it: $out/refused.txt)"

say "Done in $(($(date +%s) - began)) s"
cat <<END
Theory, paths and verdict agree for demo/island.yaml; the faulty spec and the tampered copy were refused.
  $out/theory.txt     what the spec implies: equations, means, variances, correlations
  $out/island/        the paths (Parquet, long layout) and manifest.json
  $out/verdict.txt    the verdict on the paths; verdict.html is a page with pictures, for a browser
  $out/refused.txt    the verdict on the tampered copy; refused.html likewise
A day's work with it, what was typed and what was seen:
  demo/forecaster.md    how good a forecast can be at best, and how near three methods come
  demo/qa-engineer.md   a fixture with a digest in the test file, a pull request, a damaged file
  demo/risk-analyst.md  a fan with clustered and joint extremes, a crisis beside it, a spreadsheet
END
