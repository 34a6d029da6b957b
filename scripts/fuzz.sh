#!/usr/bin/env bash
# Fuzzes the readers: each target in turn for so many seconds (default 60).
#
#   scripts/fuzz.sh [SECONDS] [TARGET...]
#
# Needs a nightly compiler (rustup toolchain install nightly); installs
# cargo-fuzz into target/ if there is none. What it finds is left in
# target/fuzz/artifacts/TARGET; put a find into tests/capture/finds/ or
# tests/fuzz/seeds/TARGET, where the tests read it on every run.
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."
root=$PWD

seconds=${1:-60}
shift || true
targets=("$@")
[ ${#targets[@]} -gt 0 ] || targets=(wav_header flac csv_layout time_stamps site_file)

if ! cargo fuzz --version >/dev/null 2>&1; then
    cargo install --quiet cargo-fuzz --root "$root/target/tools"
    export PATH="$root/target/tools/bin:$PATH"
fi

for target in "${targets[@]}"; do
    corpus=$root/target/fuzz/corpus/$target
    artifacts=$root/target/fuzz/artifacts/$target
    mkdir -p "$corpus" "$artifacts"
    # No sanitizer: the program has no unsafe code; overflow checks stay on.
    cargo +nightly fuzz run --fuzz-dir tests/fuzz --target-dir target/fuzz/build \
        --sanitizer none --debug-assertions "$target" \
        "$corpus" "tests/fuzz/seeds/$target" -- \
        -dict="tests/fuzz/dictionaries/$target.dict" -artifact_prefix="$artifacts/" \
        -max_total_time="$seconds" -timeout=10 -rss_limit_mb=1024 -max_len=8192 \
        -print_final_stats=1
done
