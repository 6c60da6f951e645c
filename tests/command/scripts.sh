#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The scripts: from any folder, with a home that cannot be written, without git.
. "$(dirname "$0")/library"

for script in install-deps demo demo-tables check; do
    check "scripts/$script is sound sh" sh -n "$root/scripts/$script"
    check "scripts/$script can be run" test -x "$root/scripts/$script"
done
check ".ci/run can be run" test -x "$root/.ci/run"
check ".ci/run calls scripts/check and nothing else" test "$(grep -vc '^#' "$root/.ci/run")" -eq 1 \
    -a "$(grep -c '^exec .*scripts/check"$' "$root/.ci/run")" -eq 1

tried 0 "$root/scripts/install-deps"
check "install-deps says nothing when nothing is missing" test ! -s out -a ! -s err

# Packages that are not there and no right to install them; no packages at all. A folder of stand-ins comes first.
mkdir stand
printf '#!/bin/sh\nexit 1\n' >stand/sudo
printf '#!/bin/sh\ncase "$*" in *libcmocka-dev* | *make*) printf "not-installed " ;; *) printf "installed " ;; esac\n' \
    >stand/dpkg-query
printf '#!/bin/sh\necho 1000\n' >stand/id
printf '#!/bin/sh\necho "$*" >>"%s/asked"\nexit 0\n' "$private" >stand/apt-get
chmod +x stand/*
with_stand() {
    PATH=$private/stand:$PATH "$root/scripts/install-deps"
}
tried 77 with_stand
check "it says what to do, in one line" test "$(cat err)" = \
    "install-deps: no right to install; as root, run: apt-get install --no-install-recommends make libcmocka-dev"
check "and asked apt-get for nothing" test ! -e asked
printf '#!/bin/sh\necho 0\n' >stand/id
tried 0 with_stand
check "as root it installs what is missing, and asks for nothing else" test "$(cat asked)" = \
    "-q -y install --no-install-recommends make libcmocka-dev"
rm asked
printf '#!/bin/sh\necho "$*" >>"%s/asked"\ncase $* in *update*) touch "%s/updated" ;; esac\ntest -e "%s/updated"\n' \
    "$private" "$private" "$private" >stand/apt-get
tried 0 with_stand
check "it fetches the lists when it has to" test "$(cut -d ' ' -f 3 asked | tr '\n' ' ')" = 'install update install '
printf '#!/bin/sh\necho "no such package"\nexit 100\n' >stand/apt-get
tried 69 with_stand
check "it shows what apt-get said, and its own line last" test "$(tail -n 1 err)" = \
    'install-deps: apt-get could not install make libcmocka-dev'
check "apt-get's words" grep -q 'no such package' err

# The demo, with the program at hand.
mkdir home elsewhere
chmod a-w home
demo() {
    (cd elsewhere && HOME=$private/home BUILD=$BUILD exec "$root/scripts/demo-tables")
}
tried 0 demo
for scene in fen-levels cider-panel; do
    for file in filled.csv cells.csv run.json; do
        check "$scene: it says where $file lies, and there it is" \
            test -s "$(sed -n "s|^ *\(.*/demo/$scene/$file\)\$|\1|p" out)"
    done
done
check "nothing was left where it was called" nothing_in elsewhere
check "nor at home" nothing_in home
finish
