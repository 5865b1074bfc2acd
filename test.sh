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
packages=(python3-numpy python3-scipy python3-ephem python3-astropy python3-erfa python3-sklearn python-drizzle-testdata fitsverify libcfitsio-bin gcc libc6-dev postgresql python3-yaml python3-gavo-votable python3-healpy libxml2-utils)

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
		say "not installed, so tests that compare with them are skipped: ${missing[*]}"
		skip=yes
	fi
fi
# With everything in place no comparison may be skipped unseen.
[[ ${skip:-} == yes ]] || export CI=true

command -v go >/dev/null || fail "go is not on PATH; go.mod says which version is needed"

say "formatting"
unformatted=$(gofmt -l .)
[[ -z $unformatted ]] || fail "run gofmt -w on:"$'\n'"$unformatted"

say "vet"
CGO_ENABLED=0 go vet ./...

work=$(mktemp -d)
server=
as=()
finish() {
	[[ -z $server ]] || "${as[@]}" "$bin/pg_ctl" -D "$server/data" -m immediate -s stop || true
	rm -rf "$work" "$server"
}
trap finish EXIT

# A PostgreSQL server of our own for the catalogue's tests, on a socket only. It
# does not run as root.
bin=$(find /usr/lib/postgresql -maxdepth 2 -name bin 2>/dev/null | sort -V | tail -n 1)
if [[ -n $bin ]]; then
	say "PostgreSQL server"
	server=$(mktemp -d)
	if [[ $(id -u) == 0 ]]; then
		as=(runuser -u postgres --)
		chown postgres "$server"
	fi
	(
		cd "$server"
		"${as[@]}" "$bin/initdb" -D data -A trust -U postgres --no-sync >/dev/null
		"${as[@]}" "$bin/pg_ctl" -D data -s -w -l log -o "-k $server -c listen_addresses= -c fsync=off" start || { cat log; exit 1; }
	) || { server=; fail "the PostgreSQL server does not start"; }
	export NIGHTSIFT_TEST_POSTGRES="postgres://postgres@/postgres?host=$server"
fi

say "static binary"
CGO_ENABLED=0 go build -o "$work/nightsift" ./cmd/nightsift

if command -v gcc >/dev/null; then
	# The command's tests start the binary that is built without the detector.
	mapfile -t raced < <(go list ./... | grep -v -e '/cmd/' -e '/internal/house$')
	say "tests, with the race detector, but for the long ones"
	CGO_ENABLED=1 go test -race -short -timeout 20m "${raced[@]}"
	say "all tests, without the race detector"
	go test -timeout 20m ./...
else
	say "tests, without the race detector, which needs gcc"
	go test -timeout 20m ./...
fi

# The demo fails when a frame meets another fate than it was made for. Its
# seed is fixed, so that these bounds do not depend on chance.
say "demo"
"$work/nightsift" demo --out "$work/demo" --quiet | tee "$work/score"
read -r found of < <(sed -n 's/^found, .*(\([0-9]*\) of \([0-9]*\),.*/\1 \2/p' "$work/score") || fail "the demo printed no completeness"
read -r false < <(sed -n 's/^false per Mpx *\([0-9.]*\) .*/\1/p' "$work/score") || fail "the demo printed no rate of false candidates"
((found * 100 >= of * 95 && of >= 30)) || fail "the demo found $found of $of clear events, expected 95 % of at least 30"
awk -v rate="$false" 'BEGIN { exit !(rate <= 0.5) }' || fail "the demo has $false false candidates for a megapixel, expected 0.5 at most"

say "passed"
