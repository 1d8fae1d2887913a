-- Who may do what. People and services are members of these roles; none of them can log in. Only
-- rights inside the schema are given or taken: schema public and the database are the bank's.

-- Roles belong to the server and the right to the database to its owner, so this part is the
-- installing login's. Another database of the server may be creating the same roles just now.
RESET ROLE;
DO $$
DECLARE
    role_name text;
BEGIN
    FOREACH role_name IN ARRAY ARRAY['loadline_engine', 'loadline_loader', 'loadline_desk', 'loadline_limits', 'loadline_reader']
    LOOP
        IF NOT EXISTS (SELECT FROM pg_catalog.pg_roles AS r WHERE r.rolname = role_name) THEN
            BEGIN
                EXECUTE pg_catalog.format('CREATE ROLE %I NOLOGIN', role_name);
            EXCEPTION WHEN duplicate_object OR unique_violation THEN
                NULL;
            END;
        END IF;
    END LOOP;
    EXECUTE pg_catalog.format('GRANT TEMPORARY ON DATABASE %I TO loadline_engine', pg_catalog.current_database());
END
$$;
SET LOCAL ROLE loadline_owner;

GRANT USAGE ON SCHEMA loadline TO loadline_engine, loadline_loader, loadline_desk, loadline_limits, loadline_reader;

-- loadline_engine: the running program.
GRANT SELECT ON
    loadline.counterparty, loadline.connected_group, loadline.group_member, loadline.rating,
    loadline.exposure, loadline.fx_rate, loadline.capital
    TO loadline_engine;
GRANT SELECT, DELETE ON loadline.change_log TO loadline_engine;
GRANT SELECT, INSERT, UPDATE ON
    loadline.assessment, loadline.alert, loadline.set_aside, loadline.config_version
    TO loadline_engine;
GRANT SELECT, INSERT, UPDATE, DELETE ON
    loadline.counterparty_risk, loadline.facility_exposure, loadline.limit_usage
    TO loadline_engine;
GRANT SELECT, INSERT ON loadline.alert_event TO loadline_engine;
GRANT EXECUTE ON FUNCTION loadline.request_assessment() TO loadline_engine;

-- loadline_loader: merges into the inputs.
GRANT SELECT, INSERT, UPDATE, DELETE ON
    loadline.counterparty, loadline.connected_group, loadline.group_member, loadline.rating,
    loadline.exposure, loadline.fx_rate, loadline.capital
    TO loadline_loader;

-- loadline_reader, loadline_limits, loadline_desk: read the results; the desk decides on alerts.
GRANT SELECT ON
    loadline.assessment, loadline.counterparty_risk, loadline.facility_exposure, loadline.limit_usage,
    loadline.alert, loadline.alert_event, loadline.set_aside, loadline.config_version,
    loadline.subject_name
    TO loadline_reader, loadline_limits, loadline_desk;
GRANT EXECUTE ON FUNCTION
    loadline.acknowledge(bigint, bigint, text, timestamptz),
    loadline.take_back(bigint, bigint, text)
    TO loadline_desk;

-- Everyone may see which steps made the schema.
GRANT SELECT ON loadline.schema_step
    TO loadline_engine, loadline_loader, loadline_desk, loadline_limits, loadline_reader;
