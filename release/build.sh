#!/bin/sh
# Builds the release binaries of one revision: static, with the version and the
# revision in them, and the same bytes whoever builds them, wherever, with the same Go.
#
#   release/build.sh [--modified] [--go VERSION] [--only OS/ARCH] DIR
#
# writes evenkeel-VERSION-OS-ARCH for linux/amd64, linux/arm64 and darwin/arm64 into DIR, and
# SHA256SUMS of them. What is built is the revision that is checked out, as git holds it, not the
# files of the folder; a folder with changes is refused. With --modified it is built as it stands,
# and the binary says so. --go takes that version of Go (1.26.8, say), which is fetched if
# it is not here; --only builds one platform and may be given again.
set -eu

fail() { printf 'release/build.sh: %s\n' "$*" >&2; exit 1; }

# The caller's folder, not what a CDPATH would make of it.
unset CDPATH
# A GIT_DIR and its likes in the environment would speak of another repository.
for name in $(git rev-parse --local-env-vars 2>/dev/null); do unset "$name"; done
LC_ALL=C
export LC_ALL
root=$(cd "$(dirname "$0")/.." && pwd -P)

modified=false
toolchain=local
platforms=
into=
while [ $# -gt 0 ]; do
  case $1 in
    --modified) modified=true ;;
    --go) [ $# -gt 1 ] || fail "--go: expected a version, as in --go 1.26.8"; toolchain=go${2#go}; shift ;;
    --only) [ $# -gt 1 ] || fail "--only: expected a platform, as in --only linux/amd64"; platforms="$platforms $2"; shift ;;
    -*) fail "found $1, expected --modified, --go VERSION, --only OS/ARCH or a folder" ;;
    *) [ -z "$into" ] || fail "found $1 after $into, expected one folder"; into=$1 ;;
  esac
  shift
done
[ -n "$into" ] || fail "expected a folder for the binaries, as in release/build.sh dist"
for platform in ${platforms:=linux/amd64 linux/arm64 darwin/arm64}; do
  case $platform in linux/amd64 | linux/arm64 | darwin/arm64) ;; *) fail "--only: found $platform, expected linux/amd64, linux/arm64 or darwin/arm64" ;; esac
done

# A configuration of the user's must neither hide a change nor make one (ends of lines).
rgit() { git -C "$root" -c core.excludesFile=/dev/null -c core.attributesFile=/dev/null -c core.autocrlf=false -c core.fsmonitor=false "$@"; }
top=$(rgit rev-parse --show-toplevel 2>/dev/null) && [ "$(cd "$top" && pwd -P)" = "$root" ] ||
  fail "$root is no git checkout: a release needs a revision to name; for a binary without one: go build ./cmd/evenkeel"
revision=$(rgit rev-parse --verify HEAD) || fail "there is no revision yet: commit first"
changes=$(rgit status --porcelain --untracked-files=all)
[ -n "$changes" ] || modified=false

work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
trap 'exit 1' HUP INT TERM
if [ "$modified" = true ]; then
  source=$root
elif [ -n "$changes" ]; then
  printf '%s\n' "$changes" | head -n 20 >&2
  fail "the folder has changes that are in no revision: commit them, or give --modified for a binary that says so"
else
  # From git alone: files that .gitignore hides are not part of the revision.
  source=$work/source
  mkdir "$source"
  rgit archive --format=tar "$revision" >"$work/source.tar"
  tar -xf "$work/source.tar" -C "$source"
fi
version=$(sed -n 's/^const Version = "\([0-9A-Za-z.+-]*\)"$/\1/p' "$source/pipeline/plan.go")
[ -n "$version" ] || fail "pipeline/plan.go: found no version, expected const Version = \"...\""
for tag in $(rgit tag --points-at "$revision" --list 'v[0-9]*'); do
  [ "$tag" = "v$version" ] || fail "the revision is tagged $tag and pipeline/plan.go says $version: one of them is wrong"
done

# Of the environment, Go gets what says where it may put and find things, and nothing that
# changes what it makes (GOFLAGS, GOAMD64, GOEXPERIMENT, go env -w, go.work and so on).
setting() { (cd "$source" && GOTOOLCHAIN=local GOWORK=off GOFLAGS= go env "$1"); }
cache=$(setting GOCACHE) modules=$(setting GOMODCACHE) proxy=$(setting GOPROXY) sums=$(setting GOSUMDB)
nosums=$(setting GONOSUMDB) noproxy=$(setting GONOPROXY)
go_for() { # OS ARCH words of a go command
  os=$1 arch=$2
  shift 2
  (cd "$source" && env -i PATH="$PATH" HOME="$work" ${TMPDIR:+TMPDIR="$TMPDIR"} ${HTTPS_PROXY:+HTTPS_PROXY="$HTTPS_PROXY"} \
    ${https_proxy:+https_proxy="$https_proxy"} ${NO_PROXY:+NO_PROXY="$NO_PROXY"} ${no_proxy:+no_proxy="$no_proxy"} \
    ${SSL_CERT_FILE:+SSL_CERT_FILE="$SSL_CERT_FILE"} ${SSL_CERT_DIR:+SSL_CERT_DIR="$SSL_CERT_DIR"} \
    LC_ALL=C TZ=UTC GOENV=off GOTELEMETRY=off GOWORK=off GOTOOLCHAIN="$toolchain" GOPATH="$work/go" GOCACHE="$cache" GOMODCACHE="$modules" \
    GOPROXY="$proxy" GOSUMDB="$sums" GONOSUMDB="$nosums" GONOPROXY="$noproxy" \
    CGO_ENABLED=0 GOOS="$os" GOARCH="$arch" GOAMD64=v1 GOARM64=v8.0 go "$@")
}

mkdir -p "$into"
into=$(cd "$into" && pwd -P)
names=
for platform in $platforms; do
  os=${platform%/*} arch=${platform#*/}
  name=evenkeel-$version-$os-$arch
  # The revision is written by us: what Go would write depends on the tags and the depth of the clone.
  go_for "$os" "$arch" build -mod=readonly -trimpath -buildvcs=false \
    -ldflags "-s -w -X evenkeel/pipeline.builtFrom=$revision -X evenkeel/pipeline.builtModified=$modified" \
    -o "$work/$name" ./cmd/evenkeel
  chmod 755 "$work/$name"
  names="$names $name"
done
cd "$work"
# Both write the same lines; Linux has the one, macOS the other.
# shellcheck disable=SC2086
if command -v sha256sum >/dev/null; then sha256sum $names >SHA256SUMS; else shasum -a 256 $names >SHA256SUMS; fi
# shellcheck disable=SC2086
mv -f $names SHA256SUMS "$into/"
printf 'evenkeel %s, revision %s%s, %s\n' "$version" "$revision" "$([ "$modified" = false ] || echo ' with changes')" \
  "$(go_for "$(setting GOHOSTOS)" "$(setting GOHOSTARCH)" env GOVERSION)"
cat "$into/SHA256SUMS"
