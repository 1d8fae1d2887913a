#!/usr/bin/env bash
# The rooms hold: what each may include, what the pure ones may not call, and that the house plan of
# DEVELOPERS.md and the tree name the same files.
#
#     tests/rooms.sh SOURCE_DIR
set -euo pipefail
cd -- "${1:?the source folder}"
export LC_ALL=C.UTF-8

faults=0
fault() {
    printf '%s\n' "$*" >&2
    faults=$((faults + 1))
}

# A file may include what a row allows whose first pattern matches its whole path and whose second
# the whole header. <name> is the standard library's, <name.h> the operating system's.
mapfile -t allowed <<'ROWS'
model/.*              <[a-z_]+>|"model/.*"|<Eigen/.*>|<boost/math/.*>
model/.*[.]cpp        <Random123/.*>|<boost/random/.*>|<(tbb|oneapi)/.*>|<[a-z]*mmintrin[.]h>
alerts/.*             <[a-z_]+>|"(model|alerts)/.*"|<fmt/.*>
config/.*             <[a-z_]+>|"(model|alerts|config)/.*"|<fmt/.*>
config/strict[.]cpp   <yaml-cpp/.*>
config/load.*[.]cpp   <Eigen/.*>|<date/.*>
daemon/.*             <[a-z_]+>|"(model|alerts|config|daemon)/.*"|<[a-z/]+[.]h>
daemon/.*             <(Eigen|boost|date|fmt|nlohmann|openssl|spdlog)/.*>
daemon/(connection|tables|schema)[.].*   <pqxx/.*>
daemon/commands[.]cpp <CLI/.*>
tests/.*              .*
ROWS

may_include() { # FILE HEADER
    local row
    for row in "${allowed[@]}"; do
        [[ $1 =~ ^(${row%% *})$ && $2 =~ ^(${row##* })$ ]] && return
    done
    return 1
}

mapfile -t files < <(find model alerts config daemon tests -name '*.[ch]pp' | sort)

header_pattern='[<"][^>"]*[>"]'
while IFS=: read -r file line text; do
    [[ $text =~ $header_pattern ]] && header=${BASH_REMATCH[0]}
    may_include "$file" "$header" || fault "$file:$line: this file may not include $header"
done < <(grep -HnE '^[[:space:]]*#[[:space:]]*include' "${files[@]}")

# Values in, values out.
impure='(system|steady)_clock::now|std::(cout|cerr|clog|printf|getenv|time|random_device|filesystem|[io]?fstream)\b'
while IFS=: read -r file line text; do
    fault "$file:$line: no clock, stream or environment in this room:$text"
done < <(grep -HnE "^([^/]|/[^/])*($impure)" model/*.[ch]pp alerts/*.[ch]pp)

# The house plan: paths in backticks, `model/book.{hpp,cpp}` for two at once.
declare -A planned=()
path_pattern="\`(model|alerts|config|daemon|sql|tests|[.]ci)/[A-Za-z0-9_./{},-]*\`"
while read -r path; do
    IFS=, read -ra ends < <(sed -nE 's/.*\{(.*)\}.*/\1/p' <<<"$path") || ends=('')
    for end in "${ends[@]}"; do planned["${path/\{*\}/$end}"]=yes; done
done < <(grep -oE "$path_pattern" DEVELOPERS.md | tr -d '`')

for path in "${!planned[@]}"; do
    [[ -e $path ]] || fault "DEVELOPERS.md: there is no $path"
done
for path in model/ alerts/ config/ daemon/ sql/ tests/ {model,alerts,config,daemon}/*.[ch]pp sql/*.sql; do
    [[ ${planned[$path]:-} ]] || fault "DEVELOPERS.md: the house plan leaves out $path"
done

[[ $faults -eq 0 ]] || { echo "$faults faults" >&2 && exit 1; }
