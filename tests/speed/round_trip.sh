#!/usr/bin/env bash
# How long from a commit to its alert, beside a bare round trip on the same server in the same run.
#
#     tests/speed/round_trip.sh [NAMES…]
#
# Needs a server found by the environment, by a superuser, with track_commit_timestamp on: every time
# is one of the server's own commits less another. Makes a database for each number of names (1500
# and 10000 unless told) and drops it again. `loadline` is looked for on PATH.
#
# bare       commit → notify → insert → commit: a client that listens is told of a commit and commits
#            one row itself. psql does not wait for its socket, so a pipe wakes it; the server
#            notifies it all the same.
# touched    a commit that takes one name over its level → the alert's row
# whole      the same commit → all contributions, their limits and alerts
set -euo pipefail
[[ $(psql -XAtc 'SHOW track_commit_timestamp') == on ]] ||
    { echo 'the server needs track_commit_timestamp = on' >&2 && exit 2; }
cd -- "$(dirname -- "$(readlink -f -- "${BASH_SOURCE[0]}")")/../.."

rounds=40
server=$PGDATABASE
folder=$(mktemp -d)
serve_pid=

stop_serve() {
    [[ $serve_pid ]] || return 0
    kill "$serve_pid" 2>/dev/null || :
    wait "$serve_pid" || :
    serve_pid=
}

cleanup() {
    local status=$?
    trap '' INT TERM HUP
    stop_serve
    PGDATABASE=$server psql -Xqc 'DROP DATABASE IF EXISTS loadline_round_trip WITH (FORCE)' || :
    rm -rf -- "$folder"
    exit "$status"
}
trap cleanup EXIT

sql() { psql -XAtq --set ON_ERROR_STOP=1 --command "$1"; }

wait_until() {
    local deadline=$((SECONDS + 120))
    until [[ $(sql "SELECT $1") == t ]]; do
        ((SECONDS < deadline)) || { tail -n 5 "$folder/serve.log" >&2 && exit 1; }
        sleep 0.05
    done
}

# An invented book: exposures fall like a power of the rank, two facilities a name. Every name from
# the 101st on is alone just inside its level.
book="
    INSERT INTO loadline.counterparty (counterparty_id, legal_name, sector, country)
    SELECT 'C' || n, 'Company ' || n, (ARRAY['AGRI', 'CONSTR', 'ENERGY', 'FINANCE', 'HEALTH', 'MANUF', 'REALEST', 'RETAIL', 'TRANSP', 'OTHER'])[1 + n % 10],
           (ARRAY['AT', 'BE', 'CH', 'CZ', 'DE', 'DK', 'ES', 'FI', 'FR', 'IT', 'NL', 'NO', 'PL', 'SE'])[1 + n % 14]
    FROM generate_series(1, :names) AS n;
    INSERT INTO loadline.rating (counterparty_id, rated_at, grade)
    SELECT 'C' || n, now() - interval '30 days', 'G' || 1 + n % 5 FROM generate_series(1, :names) AS n;
    INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn)
    SELECT 'F' || n || '-' || f, 'C' || n, 'term_loan', 'EUR', round(3e7 / power(1 + n / 20.0, 1.1))
    FROM generate_series(1, :names) AS n, generate_series(1, 2) AS f;
    INSERT INTO loadline.capital VALUES ('tier1', current_date, 1e9), ('own_funds', current_date, 1.2e9);
    ANALYZE;"

# Median and 90th percentile in milliseconds of the rows a query gives.
summary() {
    sql "SELECT format('%s ms (p90 %s)', round((percentile_cont(0.5) WITHIN GROUP (ORDER BY ms))::numeric, 2),
                       round((percentile_cont(0.9) WITHIN GROUP (ORDER BY ms))::numeric, 2))
         FROM ($1) AS t (ms)"
}
ms() { echo "1000 * extract(epoch FROM $2 - $1)"; }

measure() {
    local names=$1 bare touched whole half=$((rounds / 2))
    PGOPTIONS='-c client_min_messages=warning' psql -Xqc 'DROP DATABASE IF EXISTS loadline_round_trip WITH (FORCE)' \
        -c 'CREATE DATABASE loadline_round_trip'
    export PGDATABASE=loadline_round_trip LOADLINE_CONFIG=$folder/config
    rm -rf "$LOADLINE_CONFIG" && cp -r config "$LOADLINE_CONFIG"
    loadline schema install >/dev/null
    psql -Xq --set ON_ERROR_STOP=1 --set names="$names" <<<"$book"

    sql 'CREATE TABLE public.asked (n integer); CREATE TABLE public.answered (n integer)'
    for n in $(seq "$rounds"); do
        echo "BEGIN; INSERT INTO public.asked VALUES ($n); NOTIFY bare; COMMIT;"
        printf '\\echo INSERT INTO public.answered VALUES (%d);\n' "$n"
        echo "SELECT pg_sleep(0.02);"
    done >"$folder/ask.sql"
    stdbuf -oL psql -XAtq --file "$folder/ask.sql" |
        { sed -u '/^$/d' | psql -XAtq --command 'LISTEN bare' --file -; } >/dev/null
    bare=$(summary "SELECT $(ms 'pg_xact_commit_timestamp(a.xmin)' 'pg_xact_commit_timestamp(b.xmin)')
        FROM public.asked AS a JOIN public.answered AS b USING (n)")

    loadline serve >"$folder/serve.log" 2>&1 &
    serve_pid=$!
    wait_until 'EXISTS (SELECT FROM loadline.assessment)'
    # Half of the names get a larger exposure, half a worse rating, one at a time, by one session; and
    # nothing else happens until each is served.
    sql "CREATE TABLE public.subject AS SELECT n, 'C' || 100 + n * 7 AS counterparty_id FROM generate_series(1, $rounds) AS n"
    for n in $(seq "$rounds"); do
        if ((n <= half)); then
            echo "UPDATE loadline.exposure SET drawn = 6e7 WHERE exposure_id = 'F$((100 + n * 7))-1';"
        else
            echo "INSERT INTO loadline.rating (counterparty_id, rated_at, grade) VALUES ('C$((100 + n * 7))', now(), 'G7');"
        fi
        echo "SELECT pg_sleep(1);"
    done >"$folder/commit.sql"
    psql -XAtq --set ON_ERROR_STOP=1 --file "$folder/commit.sql" >/dev/null
    wait_until "(SELECT count(DISTINCT s.n) = $rounds FROM public.subject AS s JOIN loadline.alert ON subject = counterparty_id)
        AND (SELECT scope = 'whole' FROM loadline.assessment ORDER BY sequence DESC LIMIT 1)"
    local opened="
        SELECT s.n, coalesce(pg_xact_commit_timestamp(r.xmin), pg_xact_commit_timestamp(e.xmin)) AS committed,
               pg_xact_commit_timestamp(v.xmin) AS alerted, q.sequence
        FROM public.subject AS s
        JOIN loadline.exposure AS e ON e.exposure_id = 'F' || substr(s.counterparty_id, 2) || '-1'
        LEFT JOIN loadline.rating AS r ON r.counterparty_id = s.counterparty_id AND r.grade = 'G7'
        JOIN LATERAL (
            SELECT v.xmin, v.assessment_id FROM loadline.alert AS a JOIN loadline.alert_event AS v USING (alert_id)
            WHERE a.subject = s.counterparty_id AND v.kind IN ('opened', 'raised') ORDER BY event_id DESC LIMIT 1) AS v ON true
        JOIN loadline.assessment AS q USING (assessment_id)
        WHERE q.trigger = 'change'"
    touched=$(summary "SELECT $(ms committed alerted) FROM ($opened) AS o")
    whole=$(summary "SELECT $(ms committed 'pg_xact_commit_timestamp(w.xmin)')
        FROM ($opened) AS o JOIN LATERAL (
            SELECT xmin FROM loadline.assessment AS w
            WHERE w.sequence > o.sequence AND w.scope = 'whole' ORDER BY w.sequence LIMIT 1) AS w ON true")
    printf '%6d names, fsync %s   bare %s   touched %s   whole %s   over %s rounds\n' \
        "$names" "$(sql 'SHOW fsync')" "$bare" "$touched" "$whole" \
        "$(sql "SELECT count(*) FROM ($opened) AS o")"
    stop_serve
    export PGDATABASE=$server
}

(($#)) || set -- 1500 10000
for names in "$@"; do measure "$names"; done
