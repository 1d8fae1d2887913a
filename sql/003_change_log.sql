-- The change feed: every statement on an input table leaves the keys it touched in change_log, in
-- the writer's own transaction. If that fails the writer's statement fails too: a change is never
-- accepted unseen.

-- CACHE 1 and a row written after the writer has its transaction id: a reader's low-water mark needs
-- both. Rows come and go, so vacuum comes often and keeps the file's length.
CREATE TABLE loadline.change_log (
    id  bigint      NOT NULL GENERATED ALWAYS AS IDENTITY (CACHE 1),
    xid xid8        NOT NULL DEFAULT pg_current_xact_id(),
    src smallint    NOT NULL,
    op  char(1)     NOT NULL,
    key text,
    at  timestamptz NOT NULL DEFAULT clock_timestamp(),
    CONSTRAINT change_log_key PRIMARY KEY (id),
    CONSTRAINT change_log_op CHECK (op IN ('I', 'U', 'D', 'T', 'R'))
) WITH (
    autovacuum_vacuum_scale_factor = 0,
    autovacuum_vacuum_threshold = 2000,
    autovacuum_vacuum_cost_delay = 0,
    vacuum_truncate = off
);
COMMENT ON TABLE  loadline.change_log IS 'what has changed and is not yet assessed; says which key is dirty, never its values';
COMMENT ON COLUMN loadline.change_log.id IS 'rises in the order of writing, not of commit';
COMMENT ON COLUMN loadline.change_log.xid IS 'the writer''s transaction';
COMMENT ON COLUMN loadline.change_log.src IS '0 a request for an assessment, 1 counterparty, 2 connected_group, 3 group_member, 4 rating, 5 exposure, 6 fx_rate, 7 capital';
COMMENT ON COLUMN loadline.change_log.op IS 'I insert, U update, D delete, T truncate, R read again';
COMMENT ON COLUMN loadline.change_log.key IS 'the counterparty_id touched; null: the whole table';
COMMENT ON COLUMN loadline.change_log.at IS 'when the statement ended; its commit comes later';

-- Arguments: src, and counterparty_id where the table's rows belong to counterparties. Without the
-- latter, and beyond 50,000 keys, one row stands for the whole table. An update touches the owners
-- before and after, so that a moved facility dirties both.
CREATE FUNCTION loadline.log_change() RETURNS trigger
LANGUAGE plpgsql SECURITY DEFINER SET search_path = pg_catalog, pg_temp AS $$
DECLARE
    keys_at_most CONSTANT integer := 50000;
    whole_table  CONSTANT text[] := ARRAY[NULL::text];
    dirty text[];
BEGIN
    IF TG_OP = 'TRUNCATE' THEN
        dirty := whole_table;
    ELSIF TG_NARGS = 1 THEN
        IF EXISTS (SELECT FROM touched) THEN
            dirty := whole_table;
        END IF;
    ELSIF TG_OP = 'UPDATE' THEN
        SELECT array_agg(k.key) INTO dirty
        FROM (SELECT counterparty_id AS key FROM touched_before
              UNION SELECT counterparty_id FROM touched LIMIT keys_at_most + 1) AS k;
    ELSE
        SELECT array_agg(k.key) INTO dirty
        FROM (SELECT DISTINCT counterparty_id AS key FROM touched LIMIT keys_at_most + 1) AS k;
    END IF;
    IF cardinality(dirty) > keys_at_most THEN
        dirty := whole_table;
    END IF;
    -- A statement that touched no row leaves nothing: without a row the hint is not given either.
    IF dirty IS NOT NULL THEN
        INSERT INTO loadline.change_log (src, op, key)
        SELECT TG_ARGV[0]::smallint, left(TG_OP, 1), k.key FROM unnest(dirty) AS k (key);
    END IF;
    RETURN NULL;
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.log_change() FROM PUBLIC;
COMMENT ON FUNCTION loadline.log_change() IS 'writes the keys a statement touched to change_log';

-- A separate trigger for each event: a transition table allows no other form. ENABLE ALWAYS, so that
-- rows that arrive under session_replication_role = replica are seen too.
DO $$
DECLARE
    input record;
BEGIN
    FOR input IN
        SELECT * FROM (VALUES
            ('counterparty',    '1, counterparty_id'),
            ('connected_group', '2'),
            ('group_member',    '3, counterparty_id'),
            ('rating',          '4, counterparty_id'),
            ('exposure',        '5, counterparty_id'),
            ('fx_rate',         '6'),
            ('capital',         '7')) AS i (table_name, arguments)
    LOOP
        EXECUTE format($step$
            CREATE TRIGGER log_insert AFTER INSERT ON loadline.%1$I
                REFERENCING NEW TABLE AS touched
                FOR EACH STATEMENT EXECUTE FUNCTION loadline.log_change(%2$s);
            CREATE TRIGGER log_update AFTER UPDATE ON loadline.%1$I
                REFERENCING OLD TABLE AS touched_before NEW TABLE AS touched
                FOR EACH STATEMENT EXECUTE FUNCTION loadline.log_change(%2$s);
            CREATE TRIGGER log_delete AFTER DELETE ON loadline.%1$I
                REFERENCING OLD TABLE AS touched
                FOR EACH STATEMENT EXECUTE FUNCTION loadline.log_change(%2$s);
            CREATE TRIGGER log_truncate AFTER TRUNCATE ON loadline.%1$I
                FOR EACH STATEMENT EXECUTE FUNCTION loadline.log_change(%2$s);
            ALTER TABLE loadline.%1$I
                ENABLE ALWAYS TRIGGER log_insert,
                ENABLE ALWAYS TRIGGER log_update,
                ENABLE ALWAYS TRIGGER log_delete,
                ENABLE ALWAYS TRIGGER log_truncate;
        $step$, input.table_name, input.arguments);
    END LOOP;
END
$$;

-- A commit that notifies holds a lock of the whole server while it reaches the disk, so writers who
-- all notify queue up. Only the one open transaction that holds this advisory lock notifies; the
-- others are found by the awakened read, or by the poll, on which the promise rests. Drop this
-- trigger alone where a writer prepares transactions: PREPARE TRANSACTION refuses one that notified.
CREATE FUNCTION loadline.hint_change() RETURNS trigger
LANGUAGE plpgsql SET search_path = pg_catalog, pg_temp AS $$
BEGIN
    IF pg_try_advisory_xact_lock(1819238756, 1) THEN    -- 'load' in ASCII, and the first lock of ours
        PERFORM pg_notify('loadline_change', '');
    END IF;
    RETURN NULL;
END
$$;
REVOKE EXECUTE ON FUNCTION loadline.hint_change() FROM PUBLIC;
COMMENT ON FUNCTION loadline.hint_change() IS 'wakes the listener on channel loadline_change; at most one open transaction does';

CREATE TRIGGER change_hint AFTER INSERT ON loadline.change_log
    FOR EACH STATEMENT EXECUTE FUNCTION loadline.hint_change();
ALTER TABLE loadline.change_log ENABLE ALWAYS TRIGGER change_hint;

CREATE FUNCTION loadline.request_assessment() RETURNS bigint
LANGUAGE sql SECURITY DEFINER SET search_path = pg_catalog, pg_temp AS $$
    INSERT INTO loadline.change_log (src, op) VALUES (0, 'R') RETURNING id
$$;
REVOKE EXECUTE ON FUNCTION loadline.request_assessment() FROM PUBLIC;
COMMENT ON FUNCTION loadline.request_assessment() IS 'asks the running program for an assessment, which has begun when the change_log row returned is gone';
