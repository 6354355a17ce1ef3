#!/usr/bin/env bash
# The core and the protocol stay free of clocks, threads and std's mathematics in what they call, too: nothing beneath them
# may bring std in, and libm is the pinned one.
set -euo pipefail
cd "$(dirname "$0")/.."
for crate in trackhold-core trackhold-proto; do
  tree=$(cargo tree --locked -q -p "$crate" -e normal --prefix none --format '{p} [{f}]' | sort -u)
  allowed='trackhold-(core|proto)|bincode|bincode_derive|block-buffer|cfg-if|const-oid|cpufeatures|cpubits|crc|crc-catalog|crypto-common|digest|hybrid-array|itoa|libm|memchr|proc-macro2|quote|ryu|serde|serde_core|serde_derive|serde_json|sha2|syn|thiserror|thiserror-impl|typenum|unicode-ident|unty|virtue|zmij'
  unknown=$(printf '%s\n' "$tree" | sed 's/ .*//' | grep -vxE "$allowed" || true)
  if [ -n "$unknown" ]; then
    echo "$crate: not on the list of what it may stand on: $unknown" >&2
    exit 1
  fi
done
cargo tree --locked -q -p trackhold-core -e normal --prefix none | grep -q '^libm v0\.2\.16' || {
  echo "trackhold-core: libm is not the pinned 0.2.16" >&2
  exit 1
}
grep -q '^#!\[no_std\]' src/core/src/lib.rs
grep -q '^#!\[no_std\]' proto/src/lib.rs
echo "the core stands on what it may"
