#!/usr/bin/env bash
# A morning at the demo's bank: what its systems commit, and what Loadline makes of it.
#
#     sql/demo_morning.sh [--once]
#
# Needs a running `loadline serve` (LOADLINE_SERVE_PID), its folder of rules in LOADLINE_CONFIG, which
# is edited, and psql and loadline that find the database by the environment. Every actor of the
# story is looked up in the tables, so that it holds whatever the figures are.
# shellcheck disable=SC2154 # look_up assigns the variables it is given
set -euo pipefail

[[ $# -eq 0 || $* == --once ]] || { echo "usage: ${0##*/} [--once]" >&2; exit 2; }
: "${LOADLINE_SERVE_PID:?is not set: ./run demo starts loadline serve and sets it}"
: "${LOADLINE_CONFIG:?is not set: ./run demo makes a folder of rules that the morning may edit, and sets it}"
patience=30 # seconds

stop() {
    printf '\n%s\n' "$1" >&2
    exit 1
}

# ---- the database --------------------------------------------------------------------------------

# Rows as lines, fields parted by a tab.
sql() {
    psql --no-psqlrc --quiet --tuples-only --no-align --field-separator=$'\t' --set ON_ERROR_STOP=1 --command "$1"
}

# The fields of the first row go into the variables named; without a row the story cannot go on.
look_up() {
    local what=$1 query=$2 row
    shift 2
    row=$(sql "$query")
    [[ -n $row ]] || stop "The book has no $what: load sql/demo_book.sql into a fresh database."
    IFS=$'\t' read -r "$@" <<<"${row%%$'\n'*}"
}

wait_until() {
    local condition=$1 what=$2 deadline=$((SECONDS + patience))
    until [[ $(sql "SELECT $condition") == t ]]; do
        kill -0 "$LOADLINE_SERVE_PID" 2>/dev/null ||
            stop "loadline serve (process $LOADLINE_SERVE_PID) has ended: its log says why."
        ((SECONDS < deadline)) ||
            stop "$what did not happen within $patience s: the log of loadline serve (process $LOADLINE_SERVE_PID) says why."
        sleep 0.05
    done
}

# ---- telling the story ---------------------------------------------------------------------------

events_shown=0
commits=0

tell() {
    printf '\n%s  %s\n' "$(date +%H:%M:%S)" "$1"
}

# Each move of an alert since the last call, with the alert's sentence.
show_events() {
    local event_id alert_id kind alert any=false
    while IFS=$'\t' read -r event_id alert_id kind; do
        [[ -n $event_id ]] || continue
        alert=$(loadline alert "$alert_id")
        printf '          %-12s alert %s: %s\n' "$kind" "$alert_id" "${alert%%$'\n'*}"
        events_shown=$event_id any=true
    done < <(sql "SELECT event_id, alert_id, kind FROM loadline.alert_event WHERE event_id > $events_shown ORDER BY event_id")
    $any || printf '          no alert moves\n'
}

last_assessment() { sql 'SELECT coalesce(max(sequence), 0) FROM loadline.assessment'; }

# One commit of the bank's systems, and everything until its assessment is in the tables.
commit() {
    local sentence=$1 statement=$2 before started
    before=$(last_assessment)
    tell "$sentence"
    started=$(date +%s%N)
    sql "$statement"
    wait_until "NOT EXISTS (SELECT FROM loadline.change_log)
        AND EXISTS (SELECT FROM loadline.assessment WHERE sequence > $before AND scope = 'whole')" 'An assessment of the change'
    printf '          assessed %d ms after the commit began\n' $((($(date +%s%N) - started) / 1000000))
    commits=$((commits + 1))
    show_events
}

reload_rules() {
    kill -HUP "$LOADLINE_SERVE_PID"
}

ruling_limits() {
    sql 'SELECT limits_digest FROM loadline.assessment ORDER BY sequence DESC LIMIT 1'
}

# What the look-ups lean on: names that keep an exposure limit, the headroom of each to its breach
# level, and the distance to the next level, be it the warning's or the breach's.
inside="
    SELECT u.limit_id, u.subject AS counterparty_id, c.legal_name, c.segment, r.grade, u.observed, u.headroom,
        CASE u.standing WHEN 'within' THEN coalesce(u.warning_level, u.breach_level) ELSE u.breach_level END - u.observed AS distance
    FROM loadline.limit_usage AS u
    JOIN loadline.counterparty AS c ON c.counterparty_id = u.subject
    JOIN loadline.counterparty_risk AS r ON r.counterparty_id = u.subject
    WHERE u.subject_kind = 'name' AND u.measure = 'exposure' AND u.unit = 'money'
        AND u.standing IN ('within', 'warning') AND u.held_reason IS NULL AND u.headroom > 0"

# Facilities outside netting sets, with their rate and what they add to the exposure at default.
facility="
    SELECT e.*, f.exposure_at_default, f.rate_used
    FROM loadline.exposure AS e JOIN loadline.facility_exposure AS f USING (exposure_id)
    WHERE e.netting_set IS NULL AND e.collateral_pool IS NULL AND f.flags = '{}'"

# ---- the morning ---------------------------------------------------------------------------------

wait_until 'EXISTS (SELECT FROM loadline.assessment) AND NOT EXISTS (SELECT FROM loadline.change_log)' 'The first assessment'
look_up assessment "
    SELECT a.names, a.base_currency, round(sum(r.exposure_at_default) / 1000000),
        (SELECT count(*) FROM loadline.alert WHERE state NOT IN ('cured', 'withdrawn')),
        (SELECT coalesce(max(event_id), 0) FROM loadline.alert_event)
    FROM (SELECT * FROM loadline.assessment ORDER BY sequence DESC LIMIT 1) AS a, loadline.counterparty_risk AS r
    GROUP BY a.names, a.base_currency" names currency total alerts events_shown
first_event=$events_shown
first_assessment=$(last_assessment)
tell "Kestrelmoor Bank opens: $names counterparties, exposure of $currency $total m, $alerts alerts found at the start."

look_up 'name near its limit with a line to draw' "
    SELECT i.counterparty_id, i.legal_name, f.exposure_id, f.currency, round(f.undrawn / 1000000, 1)
    FROM ($inside) AS i JOIN ($facility) AS f USING (counterparty_id)
    WHERE f.committed AND f.product = 'revolver' AND f.undrawn > 0
    ORDER BY i.headroom / (f.undrawn * f.rate_used), f.exposure_id LIMIT 1" drawn_by name facility_id unit amount
commit "A drawing: $name draws what is left of its committed line, $unit $amount m." "
    UPDATE loadline.exposure SET drawn = drawn + undrawn, undrawn = 0 WHERE exposure_id = '$facility_id'"

look_up 'name whose limit a downgrade would break' "
    WITH inside AS ($inside), level AS (
        SELECT u.limit_id, r.grade, min(u.breach_level) AS breach_level
        FROM loadline.limit_usage AS u JOIN loadline.counterparty_risk AS r ON r.counterparty_id = u.subject
        WHERE u.subject_kind = 'name' AND u.measure = 'exposure'
        GROUP BY u.limit_id, r.grade)
    SELECT i.counterparty_id, i.legal_name, i.grade, l.grade
    FROM inside AS i JOIN level AS l ON l.limit_id = i.limit_id AND l.grade > i.grade AND l.breach_level < i.observed
    WHERE l.grade <> 'default' AND i.counterparty_id <> '$drawn_by'
        AND EXISTS (SELECT FROM loadline.rating AS a WHERE a.counterparty_id = i.counterparty_id AND a.source = 'internal')
    ORDER BY l.breach_level DESC, i.observed DESC, i.counterparty_id LIMIT 1" downgraded name from to
commit "A downgrade: $name is rated $to after $from." "
    INSERT INTO loadline.rating (counterparty_id, source, rated_at, grade, outlook)
    VALUES ('$downgraded', 'internal', now(), '$to', 'negative')"

look_up 'name near its limit in another currency' "
    SELECT f.currency, m.move, to_char(100 * m.move, 'FM990.0')
    FROM ($inside) AS i JOIN (
        SELECT e.counterparty_id, e.currency, sum(f.exposure_at_default) AS exposure_at_default
        FROM loadline.exposure AS e JOIN loadline.facility_exposure AS f USING (exposure_id)
        WHERE e.currency <> '$currency' GROUP BY e.counterparty_id, e.currency) AS f USING (counterparty_id),
        LATERAL (SELECT round(least(0.15, greatest(0.02, 1.1 * i.distance / nullif(f.exposure_at_default, 0))), 3) AS move) AS m
    ORDER BY i.distance / nullif(f.exposure_at_default, 0), i.counterparty_id LIMIT 1" unit move percent
commit "A currency move: $unit is quoted $percent% higher." "
    INSERT INTO loadline.fx_rate (currency, quoted_on, base_per_unit)
    SELECT currency, current_date, base_per_unit * (1 + $move)
    FROM loadline.fx_rate WHERE currency = '$unit' AND quoted_on <= current_date ORDER BY quoted_on DESC LIMIT 1
    ON CONFLICT (currency, quoted_on) DO UPDATE SET base_per_unit = EXCLUDED.base_per_unit"

look_up 'name near its limit that gave collateral' "
    SELECT i.counterparty_id, i.legal_name, m.fall, to_char(100 * m.fall, 'FM990')
    FROM ($inside) AS i JOIN (
        SELECT counterparty_id, sum(collateral * rate_used::numeric) AS collateral
        FROM ($facility) AS all_of_them WHERE collateral > 0 AND exposure_at_default > 0 GROUP BY counterparty_id) AS c USING (counterparty_id),
        LATERAL (SELECT round(least(1, 1.1 * i.distance / c.collateral), 2) AS fall) AS m
    ORDER BY i.distance / c.collateral, i.counterparty_id LIMIT 1" pledged_by name fall percent
commit "A revaluation: the collateral of $name is worth $percent% less." "
    UPDATE loadline.exposure SET collateral = round(collateral * (1 - $fall), 2)
    WHERE counterparty_id = '$pledged_by' AND netting_set IS NULL AND collateral > 0"

look_up 'two largest names' "
    SELECT round((max(exposure_at_default) + min(exposure_at_default)) / 2000)
    FROM (SELECT exposure_at_default FROM loadline.counterparty_risk ORDER BY exposure_at_default DESC LIMIT 2) AS largest" level
cat >>"$LOADLINE_CONFIG/limits.yaml" <<LIMIT

  - id: largest-name
    per: name
    mesure: exposure
    breach_at: $currency $level k
    act: Ask the head of credit whether the name may stay the largest.
LIMIT
ruling=$(ruling_limits)
tell "A new limit in limits.yaml, with a slip of the pen. loadline check-config says:"
loadline check-config 2>&1 | sed 's/^/          /' || true
reload_rules
commit 'The service is told to read its files again; it is then asked for an assessment.' \
    'SELECT FROM loadline.request_assessment()'
[[ $(ruling_limits) == "$ruling" ]] || stop 'A limits file with a mistake rules: that must never be.'
printf '          the limits of before go on ruling (digest %.12s…)\n' "$ruling"

sed -i 's/^    mesure: exposure$/    measure: exposure/' "$LOADLINE_CONFIG/limits.yaml"
tell 'The slip is put right, and the service reads its files again.'
reload_rules
wait_until "EXISTS (SELECT FROM (SELECT limits_digest FROM loadline.assessment ORDER BY sequence DESC LIMIT 1) AS a
    WHERE limits_digest <> '$ruling')" 'An assessment under the new limits'
printf '          the new limits rule (digest %.12s…)\n' "$(ruling_limits)"
show_events

look_up 'name over its limit that could repay' "
    SELECT a.subject, c.legal_name
    FROM loadline.alert AS a
    JOIN loadline.counterparty AS c ON c.counterparty_id = a.subject
    JOIN loadline.counterparty_risk AS r ON r.counterparty_id = a.subject
    JOIN (SELECT counterparty_id, sum(exposure_at_default) AS exposure_at_default
          FROM ($facility) AS all_of_them GROUP BY counterparty_id) AS f ON f.counterparty_id = a.subject
    WHERE a.subject_kind = 'name' AND a.measure = 'exposure' AND a.state = 'open' AND a.held_reason IS NULL AND a.level > 0
    ORDER BY a.subject = '$drawn_by' DESC, f.exposure_at_default / r.exposure_at_default DESC, a.alert_id LIMIT 1" repaid_by name
commit "A cure: $name repays two thirds of what it owes, and its lines are cut as much." "
    UPDATE loadline.exposure SET drawn = round(drawn / 3, 2), undrawn = round(undrawn / 3, 2)
    WHERE counterparty_id = '$repaid_by' AND netting_set IS NULL"

look_up 'name with an open alert' "
    SELECT a.subject, c.legal_name
    FROM loadline.alert AS a JOIN loadline.counterparty AS c ON c.counterparty_id = a.subject
    WHERE a.subject_kind = 'name' AND a.state = 'open' AND a.subject <> '$repaid_by'
    ORDER BY a.alert_id DESC LIMIT 1" mistyped name
commit "An unusable row: a loan of $currency 2 m to $name with a loss given default of 1.7." "
    INSERT INTO loadline.exposure (exposure_id, counterparty_id, product, currency, drawn, loss_given_default)
    VALUES ('MORNING-1', '$mistyped', 'term_loan', '$currency', 2000000, 1.7)"
sql "SELECT format('          set aside: %s %s, %s, amount %s; alerts held meanwhile: %s', source_table, source_key, reason, coalesce(round(amount)::text, 'not known'),
        (SELECT count(*) FROM loadline.alert WHERE held_reason IS NOT NULL AND state NOT IN ('cured', 'withdrawn')))
    FROM loadline.set_aside WHERE until IS NULL"

commit 'The row comes again with 0.7 and counts.' "
    UPDATE loadline.exposure SET loss_given_default = 0.7 WHERE exposure_id = 'MORNING-1'"

look_up 'rated name of no other source' "
    SELECT i.counterparty_id, i.legal_name
    FROM ($inside) AS i
    WHERE i.segment = 'corporate' AND i.counterparty_id NOT IN ('$downgraded', '$repaid_by')
        AND (SELECT array_agg(DISTINCT a.source) FROM loadline.rating AS a WHERE a.counterparty_id = i.counterparty_id) = ARRAY['internal']
    ORDER BY i.observed DESC, i.counterparty_id LIMIT 1" withdrawn name
commit "A withdrawal: the rating of $name is withdrawn." "
    INSERT INTO loadline.rating (counterparty_id, source, rated_at, grade) VALUES ('$withdrawn', 'internal', now(), 'withdrawn')"

tell 'A statement that changes nothing: every facility of the name is written as it was.'
sql "UPDATE loadline.exposure SET drawn = drawn WHERE counterparty_id = '$withdrawn'"
wait_until 'NOT EXISTS (SELECT FROM loadline.change_log)' 'The reading of the change'
commits=$((commits + 1))
show_events

look_up 'open alert' "
    SELECT alert_id FROM loadline.alert WHERE state = 'open' ORDER BY alert_id DESC LIMIT 1" alert_id
tell "The desk acknowledges alert $alert_id."
loadline acknowledge "$alert_id" --note 'Relationship manager called; a new rating is due this week.' | sed 's/^/          /'
show_events

tell "$(sql "SELECT format('That was the morning: %s commits, %s assessments, %s moves of alerts: %s.', $commits,
        (SELECT count(*) FROM loadline.assessment WHERE sequence > $first_assessment), sum(n), string_agg(n || ' ' || kind, ', ' ORDER BY kind))
    FROM (SELECT kind, count(*) AS n FROM loadline.alert_event WHERE event_id > $first_event GROUP BY kind) AS k")"
sql "SELECT format('          Live now: %s alerts, %s of them acknowledged.', count(*), count(*) FILTER (WHERE state = 'acknowledged'))
    FROM loadline.alert WHERE state NOT IN ('cured', 'withdrawn')"
[[ ${1:-} == --once ]] || cat <<'LOOK'

To look around, in another terminal:
    source build/demo.env
    loadline alerts             what needs someone now
    loadline alert 12           one alert with its cause and history
    loadline usage              every limit against every subject
    loadline risk               every counterparty; loadline risk C0007 down to its facilities
    psql                        the tables themselves, in schema loadline
LOOK
