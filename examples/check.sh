#!/bin/sh
# Runs the programs on every shipped model and on wrong input; the last line is N passed, N failed, N skipped.
cd "$(dirname "$0")" || exit 1
passed=0 failed=0
work=build/check
rm -rf "$work" && mkdir -p "$work"

verdict() { # verdict NAME CONDITION-STATUS
    if [ "$2" -eq 0 ]; then passed=$((passed + 1)); else failed=$((failed + 1)) && echo "failed  $1"; fi
}

# says NAME TEXT COMMAND...: exit status 0 and the text in the output
says() {
    name=$1 text=$2
    shift 2
    "$@" >"$work/out" 2>"$work/err"
    code=$?
    [ $code -eq 0 ] && [ ! -s "$work/err" ] && grep -qF -- "$text" "$work/out"
    verdict "$name" $?
}

# refuses NAME TEXT COMMAND...: exit status 2, the text on the error output, nothing on the other
refuses() {
    name=$1 text=$2
    shift 2
    "$@" >"$work/out" 2>"$work/err"
    code=$?
    [ $code -eq 2 ] && [ ! -s "$work/out" ] && grep -qF -- "$text" "$work/err"
    verdict "$name" $? || cat "$work/err"
}

model() { # model NAME LINE...
    file=$work/$1
    shift
    printf '%s\n' "$@" >"$file"
}

solve=build/solve
says "minimal program" "-5.387390917" build/minimal   # ring of 12, reference/01_heisenberg_ring.tsv row ring_E0_N12
for file in *.whorl; do
    says "$file" "ground level" $solve "$file"
    says "$file, table" "sector	dimension" $solve --table "$file"
done
# J1-J2 model of 16 sites at J2/J1 = 1/2: -0.528620 a site (reference/05_square_lattice.tsv)
says "square lattice of 16" "ground level  -8.457923351395" $solve frustrated_plane.whorl
says "one sector" "S^z = 0" $solve --sector 0 frustrated_plane.whorl
says "a sweep" "ground level" $solve --sweep G=0:1:3 glass_register.whorl
says "disorder" "standard error of 3" $solve --realisations 3 glass_register.whorl
says "two threads" "gap" $solve --threads 2 ring_magnet.whorl
says "without sectors" "all states" $solve --no-sectors ring_magnet.whorl
says "whole spectra" "hold" $solve --whole ring_magnet.whorl
says "another value" "J = 2.5" $solve --set J=2.5 ring_magnet.whorl

# the levels with and without sectors
$solve --table --whole ring_magnet.whorl | awk -F'\t' 'NR > 1 { for (k = 0; k < $3 * $7; k++) printf "%.7f\n", $5 }' | sort -g >"$work/a"
$solve --table --whole --no-sectors ring_magnet.whorl | awk -F'\t' 'NR > 1 { for (k = 0; k < $3 * $7; k++) printf "%.7f\n", $5 }' | sort -g >"$work/b"
[ "$(wc -l <"$work/a")" -eq 256 ] && paste "$work/a" "$work/b" | awk '{ d = $1 - $2; if (d > 2e-7 || d < -2e-7) bad = 1 } END { exit bad }'
verdict "same levels with and without sectors" $?
# threads and repetition change nothing
$solve --table frustrated_plane.whorl >"$work/a" && $solve --table --threads 2 frustrated_plane.whorl >"$work/b" && cmp -s "$work/a" "$work/b"
verdict "same output on two threads" $?

model one.whorl "spins 1" "add 0.5*X[0]"
says "one spin" "ground level  -0.500000000000" $solve "$work/one.whorl"
model two.whorl "spins 2" "add S[0].S[1]"
says "two spins" "ground level  -0.750000000000" $solve "$work/two.whorl"
model zero.whorl "spins 3"
says "no terms" "8 states" $solve --levels 8 "$work/zero.whorl"

model many.whorl "spins 65"
refuses "65 spins" "many.whorl:1:" $solve "$work/many.whorl"
model site.whorl "spins 3" "add Z[3]"
refuses "a site that is not there" "site.whorl:2:" $solve "$work/site.whorl"
model name.whorl "spins 3" "let Jring = 1" "add Jrimg*Z[0]"
refuses "a wrong name" "Jring" $solve "$work/name.whorl"
model word.whorl "spins 3" "ad Z[0]"
refuses "a wrong keyword" "word.whorl:2:1: " $solve "$work/word.whorl"
model bracket.whorl "spins 3" "add (Z[0] + Z[1]"
refuses "an open parenthesis" "bracket.whorl:2:" $solve "$work/bracket.whorl"
model complex.whorl "spins 2" "add i*Z[0]"
refuses "a sum that is not Hermitian" "ermitian" $solve "$work/complex.whorl"
refuses "no such file" "no_such_file" $solve no_such_file
refuses "no such option" "--levls" $solve --levls 3 ring_magnet.whorl
refuses "a bad number" "--levels" $solve --levels none ring_magnet.whorl
refuses "no such parameter" "JJ" $solve --set JJ=1 ring_magnet.whorl
refuses "no such sector" "S^z" $solve --sector 9 ring_magnet.whorl
$solve --memory 1M frustrated_plane.whorl >"$work/out" 2>"$work/err"
[ $? -eq 1 ] && grep -q "at least" "$work/err"
verdict "too little memory" $?

echo "$passed passed, $failed failed, 0 skipped"
[ "$failed" -eq 0 ]
