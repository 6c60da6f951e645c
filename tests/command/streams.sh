#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Standard input and output: "-", data that cannot be written, a reader that goes away, streams that are closed.
. "$(dirname "$0")/library"

"$FESCUE" sow -q --rows 40 --columns 20 --noise 0.1 --seen 0.5 -o sown
table=sown/table.mtx

# ---- in -------------------------------------------------------------------------------------------------------------
from_file() { # FILE ARGUMENT...
    file_=$1
    shift
    "$FESCUE" "$@" <"$file_"
}
tried 0 from_file $table fill - -o by-input
try 0 fill $table -o by-name
for file in filled.mtx cells.csv left.mtx spectrum.mtx right.mtx row-offsets.mtx column-offsets.mtx trace.csv; do
    check "from standard input the same $file" cmp by-input/$file by-name/$file
done
tried 0 from_file $table survey -
check "survey prints to standard output" test -s out
check "and says nothing on standard error" is_empty err
unnamed() { # the survey without the lines that name the table
    sed '1d; /^ *fescue fill /d' "$1"
}
unnamed out >by-input.text
try 0 survey $table
unnamed out >by-name.text
check "from standard input the same survey" cmp by-input.text by-name.text
tried 65 from_file /dev/null survey -
check "nothing on standard output" is_empty out
no_input() {
    "$FESCUE" survey - <&-
}
tried 65 no_input
check "a closed standard input is an empty one" grep -q '^fescue: ' err
gzip -c $table >table.gz
tried 0 from_file table.gz survey -
unnamed out >packed.text
check "gzip from standard input" cmp packed.text by-name.text

# ---- out ------------------------------------------------------------------------------------------------------------
to_full() {
    "$FESCUE" "$@" >/dev/full
}
to_closed() {
    "$FESCUE" "$@" >&-
}
to_nobody() { # the reader is gone before anything is written
    "$PYTHON" -c '
import os, signal, sys
signal.signal(signal.SIGPIPE, signal.SIG_DFL)
reader, writer = os.pipe()
os.close(reader)
os.dup2(writer, 1)
os.execv(sys.argv[1], sys.argv[1:])' "$FESCUE" "$@"
}
for arguments in "survey $table" --help --version 'fill --help'; do
    tried 74 to_full $arguments
    says 'standard output cannot be written: No space left on device'
    tried 74 to_closed $arguments
    says 'standard output cannot be written: Bad file descriptor'
    tried 74 to_nobody $arguments
    says 'standard output cannot be written: Broken pipe'
done
no_errors() { # files are not to be taken for the closed stream
    "$FESCUE" fill $table -o no-errors 2>&-
}
tried 0 no_errors
check "the same without a standard error" cmp no-errors/cells.csv by-name/cells.csv
all_closed() {
    "$FESCUE" fill $table -o all-closed <&- >&- 2>&-
}
tried 0 to_closed fill -q $table -o not-needed
check "standard output is not missed where nothing goes there" cmp not-needed/cells.csv by-name/cells.csv

# ---- said, and not said ---------------------------------------------------------------------------------------------
try 0 fill $table -o said
check "the summary goes to standard error" grep -q . err
check "nothing goes to standard output" is_empty out
check "it says where the results are" grep -qx 'results in said' err
try 0 fill $table -o said --quiet
check "--quiet says nothing" is_empty err
try 66 fill missing --quiet -o said-not
check "but errors" test -s err
# A terminal is told what is being done, at which rate, how far it is and what is left, from one second on: the
# first that comes of it, then the program is stopped.
on_terminal() { # PATTERN COMMAND...: whether the pattern comes on a terminal within a minute
    "$PYTHON" - "$@" <<'PYTHON'
import os, pty, re, select, signal, subprocess, sys, time
ours, theirs = pty.openpty()
given = subprocess.Popen([sys.executable, "-c", """
import sys, time
sys.stdout.write("row,column,value\\n")
for k in range(1200):
    sys.stdout.write("".join("r%d,c%d,1.5\\n" % (k, j) for j in range(400)))
    sys.stdout.flush()
    time.sleep(0.005)
"""], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL)
child = subprocess.Popen(sys.argv[2:], stdin=given.stdout, stdout=subprocess.DEVNULL, stderr=theirs)
begin, seen = time.monotonic(), b""
while time.monotonic() < begin + 60 and child.poll() is None and not re.search(sys.argv[1].encode(), seen):
    if select.select([ours], [], [], 0.1)[0]:
        if not seen:
            first = time.monotonic() - begin
        seen += os.read(ours, 4096)
for process in child, given:
    process.send_signal(signal.SIGTERM)
    process.wait()
print(seen)
sys.exit(not re.search(sys.argv[1].encode(), seen) or first < 1)
PYTHON
}
check "the rate is told where the size is not known" on_terminal 'reading, [0-9]+ MB/s' "$FESCUE" survey -
check "and what is left where it is" on_terminal 'writing the table  [0-9]+ %, [0-9]+ (s|min) left' \
    "$FESCUE" sow --rows 100000 --columns 5000 --rank 2 --seen 0.1 --truth factors -o endless
denied "no progress where there is no terminal" grep -q "$(printf '\r')" err
finish
