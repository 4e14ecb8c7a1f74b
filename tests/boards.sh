#!/bin/sh
# Board images: build, size, and the proof that no panic is reachable.
#
#   tests/boards.sh build   builds the image; its path is the last line printed
#   tests/boards.sh size    builds, then prints flash (text + data) and static RAM (data + bss) in bytes
#   tests/boards.sh proof   links the image at optimisation s, 3 and z, and shows that one reachable panic breaks it
#   tests/boards.sh cost    counts the instructions of one step of the core, part by part, on the emulated processor
#   tests/boards.sh where   if the image does not link: names the calls that end in a panic, inlined ones too
#   tests/boards.sh locks   checks that image and host are built from the same versions of the numeric crates
#
# Two compilers can do it. Stable Rust from rustup with the target installed is the plain way and is taken when it is
# there. Otherwise Debian's compiler builds `core` for the target from source (an unstable switch of cargo, turned on
# here and nowhere else), with the linker that either toolchain ships.
set -eu

target=thumbv7em-none-eabihf
# Most instructions one step may take on a Cortex-M4F, whatever the input.
most_instructions=4000
symbol=ERROR_this_image_contains_a_reachable_panic
root=$(cd "$(dirname "$0")/.." && pwd)
boards=$root/hil-fixtures/boards
# Always here, whatever CARGO_TARGET_DIR says: the demo and the end-to-end tests look for the image in this place.
output=$boards/target

# Flags from outside would replace the linker script, not add to it.
unset RUSTFLAGS CARGO_ENCODED_RUSTFLAGS CARGO_BUILD_TARGET CARGO_BUILD_RUSTFLAGS

say() { printf 'boards: %s\n' "$*" >&2; }
fail() { say "$*"; exit 1; }

# Sets `route` to stable or debian, and `linker` for the second.
choose_route() {
    if command -v rustup >/dev/null && rustup target list --installed 2>/dev/null | grep -qx "$target"; then
        route=stable
        return
    fi
    missing=
    [ -x /usr/bin/cargo ] && [ -x /usr/bin/rustc ] || missing="$missing rustc-web cargo-web"
    [ -x /usr/bin/rustc ] && [ -e "$(/usr/bin/rustc --print sysroot)/lib/rustlib/src/rust/library/core/Cargo.toml" ] ||
        missing="$missing rust-web-src"
    linker=$(find_linker) || missing="$missing binutils-arm-none-eabi"
    if [ -n "$missing" ]; then
        say "no compiler for $target. Either"
        say "    rustup target add $target"
        fail "or (Debian)  apt-get install$missing"
    fi
    route=debian
}

find_linker() {
    for compiler in rustc /usr/bin/rustc; do
        command -v "$compiler" >/dev/null || continue
        host=$("$compiler" -vV | sed -n 's/^host: //p')
        candidate=$("$compiler" --print sysroot)/lib/rustlib/$host/bin/rust-lld
        [ -x "$candidate" ] && echo "$candidate" && return
    done
    command -v arm-none-eabi-ld || command -v ld.lld
}

# build_image PROFILE [cargo options]: leaves the image at $output/$target/PROFILE/emulated-m4f
build_image() { build_package emulated-m4f "$@"; }

build_package() {
    package=$1 profile=$2
    shift 2
    cd "$boards"
    if [ "$route" = stable ]; then
        CARGO_TARGET_DIR=$output cargo build --locked -p "$package" --profile "$profile" "$@"
    else
        CARGO_TARGET_DIR=$output RUSTC_BOOTSTRAP=1 /usr/bin/cargo build --locked -p "$package" --profile "$profile" "$@" \
            --config 'unstable.build-std=["core"]' \
            --config 'build.rustc="/usr/bin/rustc"' \
            --config "target.$target.linker=\"$linker\""
    fi
}

image() { echo "$output/$target/$1/emulated-m4f"; }

locked_versions() { # FILE CRATE
    awk -v crate="$2" '$1 == "name" { name = $3 } $1 == "version" && name == "\"" crate "\"" { print $3 }' "$1"
}

# Estimates are compared bit for bit between image and host, so both must run the same maths.
locks() {
    [ -f "$root/Cargo.lock" ] || fail "no Cargo.lock in $root: run cargo generate-lockfile there"
    different=0
    for crate in crc heapless libm micromath; do
        ours=$(locked_versions "$boards/Cargo.lock" "$crate" | tr '\n' ' ')
        host=$(locked_versions "$root/Cargo.lock" "$crate" | tr '\n' ' ')
        [ -z "$ours" ] && continue
        case " $host" in
        *" $ours"*) say "$crate: ${ours}in both" ;;
        *)
            say "$crate: $ours in the image, ${host:-none }on the host; cargo update -p $crate --precise VERSION mends it"
            different=1
            ;;
        esac
    done
    return $different
}

proof() {
    for profile in release proof-3 proof-z; do
        build_image "$profile" || fail "profile $profile: no image, see above; for $symbol see $0 where"
        say "profile $profile: links, so no panic is reachable"
        log=$output/provoked-$profile.log
        if build_image "$profile" --features provoke-panic >"$log" 2>&1; then
            fail "profile $profile: an image with a reachable panic links, so the proof proves nothing"
        fi
        grep -Eq "undefined (symbol|reference).*$symbol" "$log" ||
            fail "profile $profile: the provoked image failed for another reason, see $log"
        say "profile $profile: with a provoked panic it does not link, and the linker names $symbol"
    done
}

# Links the image all the same, with the missing symbol defined as 0, and looks who calls the panic functions.
where() {
    command -v llvm-objdump >/dev/null && command -v llvm-addr2line >/dev/null || fail "no llvm-objdump: apt-get install llvm"
    forced=$output/where
    (
        output=$forced
        build_image "$1" --config "target.$target.rustflags=[\"-C\", \"link-arg=--defsym=$symbol=0\"]"
    )
    elf=$forced/$target/$1/emulated-m4f
    calls=$(llvm-objdump -d --no-show-raw-insn "$elf" |
        awk '/^[0-9a-f]+ </ { inside = /panicking|_fail/ }
            !inside && /\tb[a-z.]*\t.*<.*(panicking|_fail)/ { sub(":", "", $1); print "0x" $1 }')
    [ -n "$calls" ] || { say "profile $1: no call that ends in a panic"; return; }
    for call in $calls; do
        llvm-addr2line -i -f -p -C -e "$elf" "$call"
        echo
    done
}

size_of_image() {
    for tool in llvm-size size arm-none-eabi-size; do
        command -v "$tool" >/dev/null || continue
        "$tool" "$(image release)" | awk -v tool="$tool" 'NR == 2 {
            printf "emulated-m4f flash %d bytes (text + data, by %s)\n", $1 + $2, tool
            printf "emulated-m4f static RAM %d bytes (data + bss; stack comes on top)\n", $2 + $3
        }'
        return
    done
    fail "no size tool: apt-get install binutils"
}

# Instructions, exactly: with icount each takes 128 ns of the emulated clock.
cost() {
    command -v qemu-system-arm >/dev/null || fail "no qemu-system-arm: apt-get install qemu-system-arm"
    for profile in release proof-3; do
        build_package step-cost "$profile" || fail "no image, see above"
        say "step cost, profile $profile ($(sed -n "/profile.$profile]/,/^\$/s/opt-level = //p" "$boards/Cargo.toml"))"
        counts=$output/step-cost-$profile.txt
        timeout 600 qemu-system-arm -M mps2-an386 -icount shift=7 -display none -monitor none -serial none \
            -semihosting-config enable=on,target=native -kernel "$output/$target/$profile/step-cost" >"$counts" ||
            fail "the image did not finish"
        cat "$counts"
        step=$(sed -n 's/^step \([0-9]*\) .*/\1/p' "$counts")
        [ "${step:-$most_instructions}" -lt "$most_instructions" ] ||
            fail "profile $profile: a step takes ${step:-an unknown number of} instructions, allowed are $most_instructions"
    done
}

case ${1:-} in
build)
    choose_route
    build_image release || fail "no image, see above; for $symbol see $0 where"
    say "built with the $route compiler"
    image release
    ;;
size)
    choose_route
    build_image release
    size_of_image
    ;;
proof)
    choose_route
    proof
    ;;
cost)
    choose_route
    cost
    ;;
where)
    choose_route
    for profile in release proof-3 proof-z; do where "$profile"; done
    ;;
locks) locks ;;
*)
    sed -n '2,9s/^# \{0,1\}//p' "$0" >&2
    exit 2
    ;;
esac
