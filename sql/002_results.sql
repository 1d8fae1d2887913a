-- What Loadline alone writes. `_error` is one standard error, in the unit of the figure beside it.
-- Rows name their assessment without a foreign key: a pass rewrites them by the hundred thousand.

CREATE TABLE loadline.assessment (
    assessment_id            uuid             NOT NULL,
    sequence                 bigint           NOT NULL GENERATED ALWAYS AS IDENTITY,
    scope                    text             NOT NULL,
    trigger                  text             NOT NULL,
    as_of                    timestamptz      NOT NULL,
    started_at               timestamptz      NOT NULL,
    finished_at              timestamptz      NOT NULL,
    seconds                  double precision NOT NULL,
    program_version          text             NOT NULL,
    engine                   text             NOT NULL,
    health                   text             NOT NULL DEFAULT 'unverified',
    base_currency            text             NOT NULL,
    names                    integer          NOT NULL,
    book_digest              text             NOT NULL,
    limits_digest            text             NOT NULL,
    model_digest             text             NOT NULL,
    confidence               double precision NOT NULL,
    horizon_years            double precision NOT NULL,
    expected_loss            double precision NOT NULL,
    defaulted_loss           double precision NOT NULL,
    loss_quantile            double precision NOT NULL,
    credit_var               double precision NOT NULL,
    expected_shortfall       double precision NOT NULL,
    loss_quantile_error      double precision NOT NULL,
    credit_var_error         double precision NOT NULL,
    expected_shortfall_error double precision NOT NULL,
    plan                     jsonb            NOT NULL,
    CONSTRAINT assessment_key PRIMARY KEY (assessment_id),
    CONSTRAINT assessment_sequence_once UNIQUE (sequence),
    CONSTRAINT assessment_scope CHECK (scope IN ('whole', 'touched')),
    CONSTRAINT assessment_trigger CHECK (trigger IN ('start', 'change', 'time', 'sweep', 'reload', 'command')),
    CONSTRAINT assessment_health CHECK (health IN ('unverified', 'agrees', 'differs'))
);
COMMENT ON TABLE  loadline.assessment IS 'one pass over the book; written in the transaction that writes its figures and alerts';
COMMENT ON COLUMN loadline.assessment.assessment_id IS 'made by the program before it commits, so that it can be asked for after a lost connection';
COMMENT ON COLUMN loadline.assessment.sequence IS 'rises with each pass; gaps are normal';
COMMENT ON COLUMN loadline.assessment.scope IS 'whole: every figure is new; touched: only those the changes touch';
COMMENT ON COLUMN loadline.assessment.trigger IS 'what asked for the pass: start, change, time, sweep, reload or command';
COMMENT ON COLUMN loadline.assessment.as_of IS 'the instant the book was read at; every decision of the pass uses it';
COMMENT ON COLUMN loadline.assessment.started_at IS 'when the pass began to read';
COMMENT ON COLUMN loadline.assessment.finished_at IS 'when the figures were ready to commit';
COMMENT ON COLUMN loadline.assessment.seconds IS 'time taken from reading to the last figure, seconds';
COMMENT ON COLUMN loadline.assessment.program_version IS 'version of the program that ran the pass';
COMMENT ON COLUMN loadline.assessment.engine IS 'how the loss distribution was computed';
COMMENT ON COLUMN loadline.assessment.health IS 'whether an independent recomputation agrees: unverified, agrees or differs';
COMMENT ON COLUMN loadline.assessment.base_currency IS 'of every amount of the pass, ISO 4217';
COMMENT ON COLUMN loadline.assessment.names IS 'counterparties in the book, count';
COMMENT ON COLUMN loadline.assessment.book_digest IS 'sum modulo 2^256 of the SHA-256 of each input row, hexadecimal';
COMMENT ON COLUMN loadline.assessment.limits_digest IS 'digest of the limits files that ruled; key of config_version with kind limits';
COMMENT ON COLUMN loadline.assessment.model_digest IS 'digest of the model files that ruled; key of config_version with kind model';
COMMENT ON COLUMN loadline.assessment.confidence IS 'of loss_quantile and expected_shortfall, fraction from 0 to 1';
COMMENT ON COLUMN loadline.assessment.horizon_years IS 'how far ahead losses are looked at, years';
COMMENT ON COLUMN loadline.assessment.expected_loss IS 'mean loss of the names not in default, base currency';
COMMENT ON COLUMN loadline.assessment.defaulted_loss IS 'exposure at default times loss given default of the names in default, base currency; in no other total';
COMMENT ON COLUMN loadline.assessment.loss_quantile IS 'smallest loss that is not exceeded with probability confidence, base currency';
COMMENT ON COLUMN loadline.assessment.credit_var IS 'loss_quantile less expected_loss, base currency';
COMMENT ON COLUMN loadline.assessment.expected_shortfall IS 'mean loss of the worst (1 - confidence) of cases, base currency';
COMMENT ON COLUMN loadline.assessment.loss_quantile_error IS 'one standard error, base currency';
COMMENT ON COLUMN loadline.assessment.credit_var_error IS 'one standard error, base currency';
COMMENT ON COLUMN loadline.assessment.expected_shortfall_error IS 'one standard error, base currency';
COMMENT ON COLUMN loadline.assessment.plan IS 'how the figures were reached; the same book and plan give the same bits';

-- The three tables of figures are rewritten again and again: room in each page keeps new row
-- versions beside the old ones, off the indexes.
CREATE TABLE loadline.counterparty_risk (
    counterparty_id           text             NOT NULL,
    assessment_id             uuid             NOT NULL,
    grade                     text             NOT NULL,
    flags                     text[]           NOT NULL DEFAULT '{}',
    exposure_at_default       numeric          NOT NULL,
    default_probability       double precision NOT NULL,
    downgrade_probability     double precision NOT NULL,
    expected_loss             double precision NOT NULL,
    standalone_loss_deviation double precision NOT NULL,
    var_contribution          double precision NOT NULL,
    var_contribution_error    double precision NOT NULL,
    es_contribution           double precision NOT NULL,
    es_contribution_error     double precision NOT NULL,
    CONSTRAINT counterparty_risk_key PRIMARY KEY (counterparty_id),
    CONSTRAINT counterparty_risk_default_probability CHECK (default_probability BETWEEN 0 AND 1),
    CONSTRAINT counterparty_risk_downgrade_probability CHECK (downgrade_probability BETWEEN 0 AND 1)
) WITH (fillfactor = 80);
COMMENT ON TABLE  loadline.counterparty_risk IS 'each counterparty''s measures now';
COMMENT ON COLUMN loadline.counterparty_risk.counterparty_id IS 'key of counterparty';
COMMENT ON COLUMN loadline.counterparty_risk.assessment_id IS 'the assessment that wrote the row';
COMMENT ON COLUMN loadline.counterparty_risk.grade IS 'the grade used, after unrated_as and age; default in default';
COMMENT ON COLUMN loadline.counterparty_risk.flags IS 'what the desk should know about the inputs behind the row';
COMMENT ON COLUMN loadline.counterparty_risk.exposure_at_default IS 'sum over its netting sets, base currency';
COMMENT ON COLUMN loadline.counterparty_risk.default_probability IS 'of default within the horizon, fraction from 0 to 1; 1 in default';
COMMENT ON COLUMN loadline.counterparty_risk.downgrade_probability IS 'of a worse grade at the horizon, default included, fraction from 0 to 1; 0 in default';
COMMENT ON COLUMN loadline.counterparty_risk.expected_loss IS 'mean loss within the horizon, base currency';
COMMENT ON COLUMN loadline.counterparty_risk.standalone_loss_deviation IS 'standard deviation of its loss alone, base currency';
COMMENT ON COLUMN loadline.counterparty_risk.var_contribution IS 'its part of credit VaR; the parts sum to it; base currency';
COMMENT ON COLUMN loadline.counterparty_risk.var_contribution_error IS 'one standard error, base currency';
COMMENT ON COLUMN loadline.counterparty_risk.es_contribution IS 'its part of expected shortfall; the parts sum to it; base currency';
COMMENT ON COLUMN loadline.counterparty_risk.es_contribution_error IS 'one standard error, base currency';

CREATE TABLE loadline.facility_exposure (
    exposure_id         text             NOT NULL,
    counterparty_id     text             NOT NULL,
    exposure_at_default numeric          NOT NULL,
    rate_used           double precision NOT NULL,
    flags               text[]           NOT NULL DEFAULT '{}',
    assessment_id       uuid             NOT NULL,
    CONSTRAINT facility_exposure_key PRIMARY KEY (exposure_id)
) WITH (fillfactor = 80);
CREATE INDEX facility_exposure_by_counterparty ON loadline.facility_exposure (counterparty_id);
COMMENT ON TABLE  loadline.facility_exposure IS 'each facility''s part of its counterparty''s exposure at default now; the parts add up exactly';
COMMENT ON COLUMN loadline.facility_exposure.exposure_id IS 'key of exposure';
COMMENT ON COLUMN loadline.facility_exposure.counterparty_id IS 'key of counterparty';
COMMENT ON COLUMN loadline.facility_exposure.exposure_at_default IS 'after netting and collateral, base currency';
COMMENT ON COLUMN loadline.facility_exposure.rate_used IS 'units of base currency for one unit of the facility''s currency';
COMMENT ON COLUMN loadline.facility_exposure.flags IS 'what the desk should know about the inputs behind the row';
COMMENT ON COLUMN loadline.facility_exposure.assessment_id IS 'the assessment that wrote the row';

CREATE TABLE loadline.limit_usage (
    limit_id                   text             NOT NULL,
    subject_kind               text             NOT NULL,
    subject                    text             NOT NULL,
    assessment_id              uuid             NOT NULL,
    measure                    text             NOT NULL,
    unit                       text             NOT NULL,
    observed                   numeric          NOT NULL,
    observed_error             double precision NOT NULL,
    warning_level              numeric,
    breach_level               numeric,
    headroom                   numeric,
    standing                   text,
    held_reason                text,
    breach_probability_quarter double precision,
    breach_probability_year    double precision,
    CONSTRAINT limit_usage_key PRIMARY KEY (limit_id, subject_kind, subject),
    CONSTRAINT limit_usage_unit CHECK (unit IN ('money', 'fraction', 'index')),
    CONSTRAINT limit_usage_standing CHECK (standing IN ('within', 'at_level', 'warning', 'breach')),
    CONSTRAINT limit_usage_held_reason CHECK (held_reason IN ('row_set_aside', 'rate_missing', 'rate_old', 'level_unknown')),
    CONSTRAINT limit_usage_headroom CHECK (headroom >= 0),
    CONSTRAINT limit_usage_breach_probability_quarter CHECK (breach_probability_quarter BETWEEN 0 AND 1),
    CONSTRAINT limit_usage_breach_probability_year CHECK (breach_probability_year BETWEEN 0 AND 1)
) WITH (fillfactor = 80);
COMMENT ON TABLE  loadline.limit_usage IS 'every limit against every subject it holds for, now';
COMMENT ON COLUMN loadline.limit_usage.limit_id IS 'id in limits.yaml';
COMMENT ON COLUMN loadline.limit_usage.subject_kind IS 'name, connected_group, sector, country, grade, segment or portfolio; two joined by a comma';
COMMENT ON COLUMN loadline.limit_usage.subject IS 'id or code; unknown where the input gives none; portfolio for the whole book; two joined by a comma';
COMMENT ON COLUMN loadline.limit_usage.assessment_id IS 'the assessment that wrote the row';
COMMENT ON COLUMN loadline.limit_usage.measure IS 'what is measured, as in limits.yaml';
COMMENT ON COLUMN loadline.limit_usage.unit IS 'of observed, levels and headroom: money (base currency), fraction (from 0 to 1) or index (from 0 to 1)';
COMMENT ON COLUMN loadline.limit_usage.observed IS 'measured now, in unit';
COMMENT ON COLUMN loadline.limit_usage.observed_error IS 'one standard error of observed less breach_level, in unit; 0 for exact measures';
COMMENT ON COLUMN loadline.limit_usage.warning_level IS 'level of the warning, in unit; null: none, or it cannot be formed';
COMMENT ON COLUMN loadline.limit_usage.breach_level IS 'level of the breach, in unit; null: it cannot be formed';
COMMENT ON COLUMN loadline.limit_usage.headroom IS 'breach_level less observed, never below 0, in unit';
COMMENT ON COLUMN loadline.limit_usage.standing IS 'within, at_level, warning or breach; null: no level can be formed';
COMMENT ON COLUMN loadline.limit_usage.held_reason IS 'why the figure is not believed downward: row_set_aside, rate_missing, rate_old or level_unknown; null: it is believed';
COMMENT ON COLUMN loadline.limit_usage.breach_probability_quarter IS 'of being over the breach level within a quarter, fraction from 0 to 1';
COMMENT ON COLUMN loadline.limit_usage.breach_probability_year IS 'of being over the breach level within a year, fraction from 0 to 1';

CREATE TABLE loadline.alert (
    alert_id              bigint      NOT NULL GENERATED ALWAYS AS IDENTITY,
    limit_id              text        NOT NULL,
    subject_kind          text        NOT NULL,
    subject               text        NOT NULL,
    measure               text        NOT NULL,
    severity              text        NOT NULL,
    state                 text        NOT NULL,
    due_at                timestamptz,
    nature                text,
    episode               integer     NOT NULL,
    observed              numeric     NOT NULL,
    level                 numeric     NOT NULL,
    worst_observed        numeric     NOT NULL,
    held_reason           text,
    opened_at             timestamptz NOT NULL,
    opened_by_assessment  uuid        NOT NULL,
    changed_at            timestamptz NOT NULL,
    changed_by_assessment uuid        NOT NULL,
    ended_at              timestamptz,
    end_reason            text,
    cause                 jsonb       NOT NULL,
    wave                  text,
    owner                 text,
    row_version           bigint      NOT NULL DEFAULT 1,
    CONSTRAINT alert_key PRIMARY KEY (alert_id),
    CONSTRAINT alert_episode_once UNIQUE (limit_id, subject_kind, subject, episode),
    CONSTRAINT alert_severity CHECK (severity IN ('warning', 'breach')),
    CONSTRAINT alert_state CHECK (state IN ('open', 'acknowledged', 'waived', 'cured', 'withdrawn')),
    CONSTRAINT alert_nature CHECK (nature IN ('active', 'passive')),
    CONSTRAINT alert_episode CHECK (episode >= 1),
    CONSTRAINT alert_level CHECK (level >= 0),
    CONSTRAINT alert_held_reason CHECK (held_reason IN ('row_set_aside', 'rate_missing', 'rate_old', 'level_unknown')),
    CONSTRAINT alert_acknowledged_until CHECK (state <> 'acknowledged' OR due_at IS NOT NULL),
    CONSTRAINT alert_ended_with_reason CHECK (
        (state IN ('cured', 'withdrawn')) = (ended_at IS NOT NULL)
        AND (ended_at IS NULL) = (end_reason IS NULL))
);
-- Writing the same excess twice changes nothing: one live alert a limit and subject.
CREATE UNIQUE INDEX alert_one_live ON loadline.alert (limit_id, subject_kind, subject) WHERE state NOT IN ('cured', 'withdrawn');
COMMENT ON TABLE  loadline.alert IS 'a limit that no longer holds for a subject, from the excess to its end';
COMMENT ON COLUMN loadline.alert.alert_id IS 'what the desk quotes; gaps are normal';
COMMENT ON COLUMN loadline.alert.limit_id IS 'id in limits.yaml';
COMMENT ON COLUMN loadline.alert.subject_kind IS 'as in limit_usage';
COMMENT ON COLUMN loadline.alert.subject IS 'as in limit_usage';
COMMENT ON COLUMN loadline.alert.measure IS 'what is measured, as in limits.yaml';
COMMENT ON COLUMN loadline.alert.severity IS 'warning or breach';
COMMENT ON COLUMN loadline.alert.state IS 'open, acknowledged or waived (live); cured or withdrawn (ended)';
COMMENT ON COLUMN loadline.alert.due_at IS 'when an acknowledgement ends and the alert is open again';
COMMENT ON COLUMN loadline.alert.nature IS 'active: the firm''s own acts took it over the level; passive: they did not; null: not known';
COMMENT ON COLUMN loadline.alert.episode IS 'how many times this limit and subject have had an alert, this one included';
COMMENT ON COLUMN loadline.alert.observed IS 'measured last, in the unit of the measure: base currency, or a fraction or index from 0 to 1';
COMMENT ON COLUMN loadline.alert.level IS 'the level of its severity, in the unit of observed';
COMMENT ON COLUMN loadline.alert.worst_observed IS 'largest observed of the episode, in the unit of observed';
COMMENT ON COLUMN loadline.alert.held_reason IS 'why it may not ease or end now, as in limit_usage; null: it may';
COMMENT ON COLUMN loadline.alert.opened_at IS 'as_of of the assessment that opened it';
COMMENT ON COLUMN loadline.alert.opened_by_assessment IS 'the assessment that opened it';
COMMENT ON COLUMN loadline.alert.changed_at IS 'when state or severity last changed';
COMMENT ON COLUMN loadline.alert.changed_by_assessment IS 'the last assessment that changed state or severity; a person''s move leaves it';
COMMENT ON COLUMN loadline.alert.ended_at IS 'when it was cured or withdrawn; null while live';
COMMENT ON COLUMN loadline.alert.end_reason IS 'cured: the largest part of the cause; withdrawn: level_raised, limit_removed or out_of_scope; null while live';
COMMENT ON COLUMN loadline.alert.cause IS 'why: before, after, and the parts that add up to the change of observed less level, each in the unit of observed';
COMMENT ON COLUMN loadline.alert.wave IS 'joins alerts of one assessment that share one cause';
COMMENT ON COLUMN loadline.alert.owner IS 'who has to act, from limits.yaml';
COMMENT ON COLUMN loadline.alert.row_version IS 'rises with each change of state or severity and with nothing else; what a decision was based on';

CREATE TABLE loadline.alert_event (
    event_id      bigint      NOT NULL GENERATED ALWAYS AS IDENTITY,
    alert_id      bigint      NOT NULL,
    at            timestamptz NOT NULL,
    actor         text        NOT NULL,
    assessment_id uuid,
    decision_id   text,
    kind          text        NOT NULL,
    from_state    text        NOT NULL,
    to_state      text        NOT NULL,
    severity      text        NOT NULL,
    observed      numeric     NOT NULL,
    level         numeric     NOT NULL,
    note          text,
    CONSTRAINT alert_event_key PRIMARY KEY (event_id),
    CONSTRAINT alert_event_of_alert FOREIGN KEY (alert_id) REFERENCES loadline.alert (alert_id),
    CONSTRAINT alert_event_kind CHECK (kind IN (
        'opened', 'raised', 'eased', 'acknowledged', 'taken_back', 'due', 'worse', 'waived', 'waiver_exceeded', 'waiver_ended',
        'cured', 'withdrawn')),
    CONSTRAINT alert_event_from_state CHECK (from_state IN ('none', 'open', 'acknowledged', 'waived')),
    CONSTRAINT alert_event_to_state CHECK (to_state IN ('open', 'acknowledged', 'waived', 'cured', 'withdrawn')),
    CONSTRAINT alert_event_severity CHECK (severity IN ('warning', 'breach'))
);
CREATE INDEX alert_event_by_alert ON loadline.alert_event (alert_id);
COMMENT ON TABLE  loadline.alert_event IS 'every move of every alert; rows are added and never changed';
COMMENT ON COLUMN loadline.alert_event.event_id IS 'order of writing; gaps are normal';
COMMENT ON COLUMN loadline.alert_event.alert_id IS 'key of alert';
COMMENT ON COLUMN loadline.alert_event.at IS 'as_of of the assessment, or the instant a person decided';
COMMENT ON COLUMN loadline.alert_event.actor IS 'login of the person, or the program';
COMMENT ON COLUMN loadline.alert_event.assessment_id IS 'the assessment that made the move; null: a person did';
COMMENT ON COLUMN loadline.alert_event.decision_id IS 'joins the moves of one decision on several alerts';
COMMENT ON COLUMN loadline.alert_event.kind IS 'which move';
COMMENT ON COLUMN loadline.alert_event.from_state IS 'state before; none for a new alert';
COMMENT ON COLUMN loadline.alert_event.to_state IS 'state after';
COMMENT ON COLUMN loadline.alert_event.severity IS 'severity after: warning or breach';
COMMENT ON COLUMN loadline.alert_event.observed IS 'measured at the move, in the unit of the measure';
COMMENT ON COLUMN loadline.alert_event.level IS 'the level of the severity at the move, in the unit of observed';
COMMENT ON COLUMN loadline.alert_event.note IS 'what the person wrote, or the reason of the move';

CREATE TABLE loadline.set_aside (
    source_table text        NOT NULL,
    source_key   text        NOT NULL,
    reason       text        NOT NULL,
    amount       numeric,
    since        timestamptz NOT NULL,
    until        timestamptz,
    CONSTRAINT set_aside_key PRIMARY KEY (source_table, source_key, reason, since)
);
CREATE UNIQUE INDEX set_aside_once ON loadline.set_aside (source_table, source_key, reason) WHERE until IS NULL;
COMMENT ON TABLE  loadline.set_aside IS 'input rows that cannot be used, and since when; the subjects they touch are held';
COMMENT ON COLUMN loadline.set_aside.source_table IS 'the input table';
COMMENT ON COLUMN loadline.set_aside.source_key IS 'the row''s key; parts joined by /';
COMMENT ON COLUMN loadline.set_aside.reason IS 'what is wrong with it';
COMMENT ON COLUMN loadline.set_aside.amount IS 'what it would have added to exposure, base currency; null: cannot be told';
COMMENT ON COLUMN loadline.set_aside.since IS 'as_of of the first assessment that set it aside';
COMMENT ON COLUMN loadline.set_aside.until IS 'as_of of the first assessment that could use it or no longer saw it; null: still set aside';

CREATE TABLE loadline.config_version (
    kind       text        NOT NULL,
    digest     text        NOT NULL,
    files      jsonb       NOT NULL,
    loaded_at  timestamptz NOT NULL,
    loaded_by  text        NOT NULL,
    ruled_from timestamptz,
    ruled_to   timestamptz,
    CONSTRAINT config_version_key PRIMARY KEY (kind, digest),
    CONSTRAINT config_version_kind CHECK (kind IN ('limits', 'model', 'service'))
);
COMMENT ON TABLE  loadline.config_version IS 'the text of every configuration that was loaded, and when it ruled';
COMMENT ON COLUMN loadline.config_version.kind IS 'limits, model or service';
COMMENT ON COLUMN loadline.config_version.digest IS 'SHA-256 over name length, name, length and bytes of each file in a fixed order, hexadecimal';
COMMENT ON COLUMN loadline.config_version.files IS 'the files'' text by name';
COMMENT ON COLUMN loadline.config_version.loaded_at IS 'when it was first loaded';
COMMENT ON COLUMN loadline.config_version.loaded_by IS 'login that loaded it';
COMMENT ON COLUMN loadline.config_version.ruled_from IS 'as_of of the first assessment of its latest reign; null: it never ruled';
COMMENT ON COLUMN loadline.config_version.ruled_to IS 'when another took over; null: it rules, or never did';

CREATE VIEW loadline.subject_name AS
SELECT 'name'::text AS subject_kind, counterparty_id AS subject, legal_name AS name FROM loadline.counterparty
UNION ALL
SELECT 'connected_group', group_id, name FROM loadline.connected_group;
COMMENT ON VIEW   loadline.subject_name IS 'what the desk calls counterparties and groups, for those who may not read the inputs';
COMMENT ON COLUMN loadline.subject_name.subject_kind IS 'name or connected_group';
COMMENT ON COLUMN loadline.subject_name.subject IS 'key of counterparty or connected_group';
COMMENT ON COLUMN loadline.subject_name.name IS 'legal name, or name of the group';

-- Each guard names its reason and the next step. None of them knows the life of an alert: that is
-- one table, in the program.
CREATE FUNCTION loadline.guard_alert() RETURNS trigger
LANGUAGE plpgsql SET search_path = pg_catalog, pg_temp AS $$
BEGIN
    IF OLD.state IN ('cured', 'withdrawn') AND NEW.state <> OLD.state THEN
        RAISE EXCEPTION 'alert % is %, which is final: a new excess is a new row with the next episode',
            OLD.alert_id, OLD.state
            USING ERRCODE = 'object_not_in_prerequisite_state';
    END IF;
    IF NEW.row_version < OLD.row_version
        OR (NEW.row_version = OLD.row_version AND (NEW.state, NEW.severity) <> (OLD.state, OLD.severity)) THEN
        RAISE EXCEPTION 'alert % is at row version %, version % is stale: read it again',
            OLD.alert_id, OLD.row_version, NEW.row_version
            USING ERRCODE = 'object_not_in_prerequisite_state';
    END IF;
    RETURN NEW;
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.guard_alert() FROM PUBLIC;
COMMENT ON FUNCTION loadline.guard_alert() IS 'refuses to leave an ended state, and a stale row_version';

CREATE TRIGGER guard BEFORE UPDATE ON loadline.alert
    FOR EACH ROW EXECUTE FUNCTION loadline.guard_alert();
ALTER TABLE loadline.alert ENABLE ALWAYS TRIGGER guard;

CREATE FUNCTION loadline.refuse_change() RETURNS trigger
LANGUAGE plpgsql SET search_path = pg_catalog, pg_temp AS $$
BEGIN
    RAISE EXCEPTION '%.% is append-only: add a row instead of %', TG_TABLE_SCHEMA, TG_TABLE_NAME, TG_OP
        USING ERRCODE = 'object_not_in_prerequisite_state';
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.refuse_change() FROM PUBLIC;
COMMENT ON FUNCTION loadline.refuse_change() IS 'keeps a table append-only, for its owner too';

CREATE TRIGGER append_only BEFORE UPDATE OR DELETE OR TRUNCATE ON loadline.alert_event
    FOR EACH STATEMENT EXECUTE FUNCTION loadline.refuse_change();
ALTER TABLE loadline.alert_event ENABLE ALWAYS TRIGGER append_only;

-- A person's move on an alert: what acknowledge and take_back share. The row lock makes the program's
-- move on the same alert wait or retry.
CREATE FUNCTION loadline.decide(
    alert_id bigint, row_version bigint, kind text, from_state text, to_state text, note text, due_at timestamptz)
RETURNS bigint
LANGUAGE plpgsql SET search_path = pg_catalog, pg_temp AS $$
DECLARE
    seen loadline.alert;
    decided_at timestamptz;
BEGIN
    IF note IS NULL OR note !~ '\S' THEN
        RAISE EXCEPTION 'the note is empty: say in it what was decided and why'
            USING ERRCODE = 'invalid_parameter_value';
    END IF;
    SELECT * INTO seen FROM loadline.alert AS a WHERE a.alert_id = decide.alert_id FOR UPDATE;
    IF NOT FOUND THEN
        RAISE EXCEPTION 'there is no alert %: take its number from the list of alerts', alert_id
            USING ERRCODE = 'no_data_found';
    END IF;
    IF seen.state <> from_state THEN
        RAISE EXCEPTION 'alert % is %, nothing to %: only an alert that is % can be', alert_id, seen.state,
            CASE kind WHEN 'acknowledged' THEN 'acknowledge' ELSE 'take back' END, from_state
            USING ERRCODE = 'object_not_in_prerequisite_state';
    END IF;
    IF row_version IS DISTINCT FROM seen.row_version THEN
        RAISE EXCEPTION 'alert % has changed since you read it (row version %, now %): read it again',
            alert_id, row_version, seen.row_version
            USING ERRCODE = 'object_not_in_prerequisite_state';
    END IF;
    decided_at := clock_timestamp();    -- after the wait for the lock, so that events stay in order
    UPDATE loadline.alert AS a
    SET state = to_state, due_at = decide.due_at, changed_at = decided_at, row_version = seen.row_version + 1
    WHERE a.alert_id = seen.alert_id;
    INSERT INTO loadline.alert_event (alert_id, at, actor, kind, from_state, to_state, severity, observed, level, note)
    VALUES (seen.alert_id, decided_at, session_user, kind, from_state, to_state, seen.severity, seen.observed, seen.level, note);
    RETURN seen.row_version + 1;
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.decide(bigint, bigint, text, text, text, text, timestamptz) FROM PUBLIC;
COMMENT ON FUNCTION loadline.decide(bigint, bigint, text, text, text, text, timestamptz) IS 'writes a person''s move on an alert with its event; only for acknowledge and take_back';

CREATE FUNCTION loadline.acknowledge(alert_id bigint, row_version bigint, note text, due_at timestamptz)
RETURNS bigint
LANGUAGE plpgsql SECURITY DEFINER SET search_path = pg_catalog, pg_temp AS $$
BEGIN
    IF due_at IS NULL OR due_at <= clock_timestamp() OR due_at = 'infinity' THEN
        RAISE EXCEPTION 'an acknowledgement ends at an instant in the future, not at %', coalesce(due_at::text, 'null')
            USING ERRCODE = 'invalid_parameter_value';
    END IF;
    RETURN loadline.decide(alert_id, row_version, 'acknowledged', 'open', 'acknowledged', note, due_at);
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.acknowledge(bigint, bigint, text, timestamptz) FROM PUBLIC;
COMMENT ON FUNCTION loadline.acknowledge(bigint, bigint, text, timestamptz) IS 'takes up an open alert until due_at, on the row_version that was read; returns the new row_version';

CREATE FUNCTION loadline.take_back(alert_id bigint, row_version bigint, note text)
RETURNS bigint
LANGUAGE plpgsql SECURITY DEFINER SET search_path = pg_catalog, pg_temp AS $$
BEGIN
    RETURN loadline.decide(alert_id, row_version, 'taken_back', 'acknowledged', 'open', note, NULL);
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.take_back(bigint, bigint, text) FROM PUBLIC;
COMMENT ON FUNCTION loadline.take_back(bigint, bigint, text) IS 'opens an acknowledged alert again, on the row_version that was read; returns the new row_version';
