#!/bin/sh
# Runs the study beside this file again and fails when the headroom needed is above its max_headroom.
#
# usage: sh check-headroom.sh [options of labkit run]
# LABKIT         the checkout of labkit; default: labkit, beside this file
# LABKIT_SOURCE  where git clones it from when it is not there
# LABKIT_COMMIT  the commit or tag to take then; name one, so that the same code answers every time
#
# exit status: 0 within the limit; 1 above it, or a run failed; 2 the tables, the study or a variable was refused
set -eu
fail() {
    printf 'check-headroom: %s\n' "$$1" >&2
    exit 2
}
here=$$(CDPATH='' cd -- "$$(dirname -- "$$0")" && pwd)
labkit=$${LABKIT:-$$here/labkit}
if [ ! -e "$$labkit" ] && [ -n "$${LABKIT_SOURCE:-}" ]; then
    commit=$${LABKIT_COMMIT:-HEAD}
    rm -rf "$$labkit.part" # in place only when whole, and at the commit that was asked for
    git clone --quiet "$$LABKIT_SOURCE" "$$labkit.part" || fail "LABKIT_SOURCE is '$$LABKIT_SOURCE'; git could not clone it (see above)."
    git -C "$$labkit.part" checkout --quiet "$$commit" -- || fail "LABKIT_COMMIT is '$$commit'; the clone has no such commit."
    mv "$$labkit.part" "$$labkit"
fi
[ -f "$$labkit/.ci/setup" ] || fail "'$$labkit' is no checkout of labkit; name one in LABKIT, or where to clone it from in LABKIT_SOURCE."
sh "$$labkit/.ci/setup"
exec "$$labkit/.venv/bin/labkit" run "$$here/$name.toml" --store "$$here/records" --output "$$here/answers" "$$@"
