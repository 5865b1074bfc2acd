#!/usr/bin/env bash
# All tests of nightsift: reference programs, formatting, vet, static build,
# tests with the race detector, and the demo scored against its truth.
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")"

say() { printf '== %s (%d s)\n' "$*" "$SECONDS"; }
fail() { printf 'test.sh: %s\n' "$*" >&2; exit 1; }

# The programs that the numbers are checked against. The tests call Debian's
# own interpreter, /usr/bin/python3, for which apt-get installs the modules.
# gcc is for the race detector.
packages=(python3-numpy python3-scipy python3-astropy python3-erfa python3-sklearn fitsverify gcc libc6-dev)

missing=()
for p in "${packages[@]}"; do
	status=$(dpkg-query --show --showformat='${db:Status-Status}' "$p" 2>/dev/null || true)
	[[ $status == installed ]] || missing+=("$p")
done
if ((${#missing[@]})); then
	if [[ $(id -u) == 0 ]] && command -v apt-get >/dev/null; then
		say "installing ${missing[*]}"
		export DEBIAN_FRONTEND=noninteractive
		apt-get -qq update
		apt-get -qq install --yes --no-install-recommends "${missing[@]}" >/dev/null
	else
		# Outside CI, tests that need what is missing are skipped.
		say "not installed: ${missing[*]}"
	fi
fi

command -v go >/dev/null || fail "go is not on PATH; go.mod says which version is needed"

say "formatting"
unformatted=$(gofmt -l .)
[[ -z $unformatted ]] || fail "run gofmt -w on:"$'\n'"$unformatted"

say "vet"
go vet ./...

work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT

say "static binary"
CGO_ENABLED=0 go build -trimpath -o "$work/nightsift" ./cmd/nightsift

say "tests"
go test -race -timeout 20m ./...

# The demo fails when a frame meets another fate than it was made for.
say "demo"
"$work/nightsift" demo --out "$work/demo" --quiet

say "passed"
