# Shared by the scripts here: where things are, and what they need.
# shellcheck shell=bash
set -euo pipefail
root="$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd)"
build="$root/.build"
mkdir -p "$build/bin"
export GOBIN="$build/bin" GOFLAGS="${GOFLAGS:--buildvcs=auto}"

say() { printf '\n== %s\n' "$*"; }

# need COMMAND PACKAGE…: installs Debian packages unless the command is there.
need() {
  local command=$1
  shift
  command -v "$command" >/dev/null && return
  PATH="$PATH:/usr/sbin" command -v "$command" >/dev/null && return
  if [ "$(id -u)" -ne 0 ]; then
    echo "$command is missing: as root, apt-get install $*" >&2
    exit 1
  fi
  say "installing $*"
  [ -n "${updated:-}" ] || apt-get update -qq
  updated=1
  DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends "$@" >/dev/null
}

need_go() {
  if ! command -v go >/dev/null; then
    echo "Go 1.26 or later is missing: see https://go.dev/doc/install" >&2
    exit 1
  fi
}

# tool NAME MODULE@VERSION: a Go command of a pinned version in .build/bin.
tool() {
  local stamp="$build/bin/.$1"
  [ -x "$build/bin/$1" ] && [ "$(cat "$stamp" 2>/dev/null)" = "$2" ] && return
  say "installing $1 ($2)"
  CGO_ENABLED=0 go install "$2"
  echo "$2" >"$stamp"
}

# need_node puts a Node.js on the path that the page's tools take. Where Debian's
# is older, a newer one comes as an npm package.
need_node() {
  local wanted=20.19 newer=22.23.5 arch
  need node nodejs npm
  need npm npm
  if [ "$(printf '%s\n' "v$wanted" "$(node --version)" | sort -V | head -n 1)" = "v$wanted" ]; then return; fi
  case "$(uname -m)" in
    x86_64) arch=x64 ;;
    aarch64) arch=arm64 ;;
    *) echo "Node.js $(node --version) is older than $wanted, and there is no package of a newer one for $(uname -m)" >&2; exit 1 ;;
  esac
  local dir="$build/node/node_modules/node-linux-$arch/bin"
  if [ ! -x "$dir/node" ]; then
    say "installing Node.js $newer, as $(node --version) is older than $wanted"
    npm install --silent --no-audit --no-fund --prefix "$build/node" "node-linux-$arch@$newer"
  fi
  export PATH="$dir:$PATH"
}

# page builds the web part into dashboard/web/dist when its sources changed.
page() {
  need_node
  local web="$root/dashboard/web" now stamp
  now="$(cd "$web" && find . -path ./node_modules -prune -o -path ./dist -prune -o -type f -print0 | sort -z | xargs -0 sha256sum | sha256sum)"
  stamp="$build/page.sum"
  [ -f "$web/dist/index.html" ] && [ "$(cat "$stamp" 2>/dev/null)" = "$now" ] && return
  say "building the page"
  (cd "$web" && npm ci --no-audit --no-fund --silent && npm run --silent build)
  touch "$web/dist/.keep"
  echo "$now" >"$stamp"
}

binary() {
  need_go
  page
  say "building .build/throatwatch"
  (cd "$root" && CGO_ENABLED=0 go build -trimpath -o "$build/throatwatch" ./cmd/throatwatch)
}

# licences gathers the licence texts of what is compiled in.
licences() {
  local out="$build/licences.txt" name dir
  : >"$out"
  while read -r name dir; do
    for f in "$dir"/LICEN* "$dir"/COPYING* "$dir"/NOTICE*; do
      [ -f "$f" ] || continue
      printf '\n==== %s %s\n\n' "$name" "$(basename "$f")" >>"$out"
      cat "$f" >>"$out"
    done
  done < <(cd "$root" && go list -deps -f '{{with .Module}}{{if not .Main}}{{.Path}} {{.Dir}}{{end}}{{end}}' ./cmd/throatwatch | sort -u
    [ ! -d "$root/dashboard/web/node_modules/uplot" ] || echo "uplot $root/dashboard/web/node_modules/uplot")
}
