#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The tables of datasets-synthetic are what the commands beside them make, byte for byte. Compared is what is within the
# gzip files: another version of zlib may pack the same text otherwise.
. "$(dirname "$0")/library"

listed=$(sed -n 's/.*`fescue \(sow [^`]*\)`.*/\1/p' "$root/datasets-synthetic/README.md")
check "README.md lists two commands" test "$(printf '%s\n' "$listed" | wc -l)" -eq 2
printf '%s\n' "$listed" | while IFS= read -r command; do
    "$FESCUE" $command --quiet || echo "fescue $command failed"
done >made 2>&1
check "they run" is_empty made
for folder in fen-levels cider-panel; do
    kept=$root/datasets-synthetic/$folder made=datasets-synthetic/$folder
    check "$folder: the same files" test "$(ls "$kept")" = "$(ls "$made")"
    for file in table.csv truth.csv; do
        gzip -dc "$kept/$file.gz" >kept.csv
        gzip -dc "$made/$file.gz" >made.csv
        check "$folder: the same $file" cmp kept.csv made.csv
        check "$folder: $file is not empty" test -s kept.csv
    done
    check "$folder: the same sow.json" cmp "$kept/sow.json" "$made/sow.json"
done
# What README.md tells of them, counted with nothing of ours.
gzip -dc "$root/datasets-synthetic/fen-levels/table.csv.gz" >fen.csv
check "fen-levels: 1440 hours" test "$(wc -l <fen.csv)" -eq 1441
check "fen-levels: 48 wells" test "$(head -n 1 fen.csv | tr ',' '\n' | wc -l)" -eq 49
check "fen-levels: six wells come after the tenth day" \
    test "$(head -n 241 fen.csv | tail -n +2 | awk -F, '{ for (k = 2; k <= NF; k++) if ($k != "") seen[k] = 1 }
        END { for (k = 2; k <= 49; k++) late += !(k in seen); print late }')" -eq 6
gzip -dc "$root/datasets-synthetic/cider-panel/table.csv.gz" >cider.csv
check "cider-panel: 900 panellists" test "$(tail -n +2 cider.csv | cut -d, -f1 | sort -u | wc -l)" -eq 900
check "cider-panel: 240 ciders" test "$(tail -n +2 cider.csv | cut -d, -f2 | sort -u | wc -l)" -eq 240
denied "cider-panel: no score but halves from 0 to 10" grep -qvE '^panellist,|,([0-9]\.[05]|10\.0)$' cider.csv
finish
