-- What upstream systems write. A constraint refuses only what can never be right: feeds arrive in
-- any order, so inputs do not refer to each other, and a value outside its domain is accepted here,
-- set aside by the program and shown.

CREATE TABLE loadline.counterparty (
    counterparty_id   text             NOT NULL,
    legal_name        text             NOT NULL,
    segment           text             NOT NULL DEFAULT 'corporate',
    sector            text,
    country           text,
    country_of_risk   text,
    lei               text,
    asset_correlation double precision,
    watch_since       date,
    watch_reason      text,
    CONSTRAINT counterparty_key PRIMARY KEY (counterparty_id),
    CONSTRAINT counterparty_segment CHECK (segment IN ('corporate', 'bank', 'sovereign', 'fund', 'ccp', 'other'))
);
COMMENT ON TABLE  loadline.counterparty IS 'whom the firm lends to or trades with; one row a counterparty';
COMMENT ON COLUMN loadline.counterparty.counterparty_id IS 'the firm''s own key; no comma or control character';
COMMENT ON COLUMN loadline.counterparty.legal_name IS 'registered name';
COMMENT ON COLUMN loadline.counterparty.segment IS 'corporate, bank, sovereign, fund, ccp or other';
COMMENT ON COLUMN loadline.counterparty.sector IS 'the firm''s own sector code; null counts as unknown';
COMMENT ON COLUMN loadline.counterparty.country IS 'country of incorporation, ISO 3166-1 alpha-2; null counts as unknown';
COMMENT ON COLUMN loadline.counterparty.country_of_risk IS 'country whose risk it carries, ISO 3166-1 alpha-2; null: as country';
COMMENT ON COLUMN loadline.counterparty.lei IS 'legal entity identifier, ISO 17442; a wrong one is flagged and ignored';
COMMENT ON COLUMN loadline.counterparty.asset_correlation IS 'share of asset return variance that is systematic, fraction from 0 to 0.99; null: from model.yaml; a value outside is flagged and ignored';
COMMENT ON COLUMN loadline.counterparty.watch_since IS 'first day on the firm''s watch list; null: not on it';
COMMENT ON COLUMN loadline.counterparty.watch_reason IS 'why it is on the watch list, in the firm''s words';

CREATE TABLE loadline.connected_group (
    group_id text NOT NULL,
    name     text NOT NULL,
    CONSTRAINT connected_group_key PRIMARY KEY (group_id)
);
COMMENT ON TABLE  loadline.connected_group IS 'counterparties that would fall together, by control or by economic dependence';
COMMENT ON COLUMN loadline.connected_group.group_id IS 'the firm''s own key; no comma or control character';
COMMENT ON COLUMN loadline.connected_group.name IS 'what the desk calls the group';

CREATE TABLE loadline.group_member (
    group_id        text NOT NULL,
    counterparty_id text NOT NULL,
    tie             text NOT NULL,
    valid_from      date NOT NULL,
    valid_until     date,
    CONSTRAINT group_member_key PRIMARY KEY (group_id, counterparty_id, valid_from),
    CONSTRAINT group_member_tie CHECK (tie IN ('control', 'economic'))
);
CREATE INDEX group_member_by_counterparty ON loadline.group_member (counterparty_id);
COMMENT ON TABLE  loadline.group_member IS 'who belongs to which connected group, and when; a counterparty may be in several groups';
COMMENT ON COLUMN loadline.group_member.group_id IS 'key of connected_group';
COMMENT ON COLUMN loadline.group_member.counterparty_id IS 'key of counterparty';
COMMENT ON COLUMN loadline.group_member.tie IS 'control or economic';
COMMENT ON COLUMN loadline.group_member.valid_from IS 'first day of the membership';
COMMENT ON COLUMN loadline.group_member.valid_until IS 'last day of the membership, which holds through it; null: no end';

CREATE TABLE loadline.rating (
    counterparty_id text        NOT NULL,
    source          text        NOT NULL DEFAULT 'internal',
    rated_at        timestamptz NOT NULL,
    grade           text        NOT NULL,
    outlook         text,
    recorded_at     timestamptz NOT NULL DEFAULT now(),
    CONSTRAINT rating_key PRIMARY KEY (counterparty_id, source, rated_at)
);
COMMENT ON TABLE  loadline.rating IS 'every rating a counterparty was given; the newest of a source that is not in the future rules';
COMMENT ON COLUMN loadline.rating.counterparty_id IS 'key of counterparty';
COMMENT ON COLUMN loadline.rating.source IS 'who rated: internal, or another of model.yaml''s rating_sources';
COMMENT ON COLUMN loadline.rating.rated_at IS 'when the rating begins to rule';
COMMENT ON COLUMN loadline.rating.grade IS 'a grade of model.yaml''s scale, or default, or withdrawn';
COMMENT ON COLUMN loadline.rating.outlook IS 'where the rater expects it to move, in the rater''s words';
COMMENT ON COLUMN loadline.rating.recorded_at IS 'when the row came into this table';

CREATE TABLE loadline.exposure (
    exposure_id          text             NOT NULL,
    counterparty_id      text             NOT NULL,
    product              text             NOT NULL,
    currency             text             NOT NULL,
    drawn                numeric          NOT NULL,
    undrawn              numeric          NOT NULL DEFAULT 0,
    conversion_factor    double precision,
    committed            boolean          NOT NULL DEFAULT true,
    add_on               numeric          NOT NULL DEFAULT 0,
    collateral           numeric          NOT NULL DEFAULT 0,
    netting_set          text,
    collateral_pool      text,
    loss_given_default   double precision,
    maturity             date,
    booked_at            timestamptz,
    large_exposure_value numeric,
    CONSTRAINT exposure_key PRIMARY KEY (exposure_id)
);
CREATE INDEX exposure_by_counterparty ON loadline.exposure (counterparty_id);
COMMENT ON TABLE  loadline.exposure IS 'facilities and trades as they stand now; one row each';
COMMENT ON COLUMN loadline.exposure.exposure_id IS 'the firm''s own key of the facility or trade';
COMMENT ON COLUMN loadline.exposure.counterparty_id IS 'key of counterparty';
COMMENT ON COLUMN loadline.exposure.product IS 'the firm''s own product code; chooses the conversion factor in model.yaml';
COMMENT ON COLUMN loadline.exposure.currency IS 'of every amount in the row, ISO 4217';
COMMENT ON COLUMN loadline.exposure.drawn IS 'balance or market value today, units of currency; negative only inside a netting set';
COMMENT ON COLUMN loadline.exposure.undrawn IS 'what may still be drawn, units of currency, 0 or more';
COMMENT ON COLUMN loadline.exposure.conversion_factor IS 'part of undrawn expected to be drawn by default, fraction from 0 to 1; null: from model.yaml by product';
COMMENT ON COLUMN loadline.exposure.committed IS 'false: the firm may refuse further drawings';
COMMENT ON COLUMN loadline.exposure.add_on IS 'potential future exposure as the firm computed it, units of currency, 0 or more';
COMMENT ON COLUMN loadline.exposure.collateral IS 'collateral value after haircut allocated to the row, units of currency, 0 or more';
COMMENT ON COLUMN loadline.exposure.netting_set IS 'rows of one counterparty with the same value net against each other; null: on its own';
COMMENT ON COLUMN loadline.exposure.collateral_pool IS 'key of a pool of collateral that several rows share';
COMMENT ON COLUMN loadline.exposure.loss_given_default IS 'part of the exposure at default that is lost, after collateral, fraction from 0 to 1; null: from model.yaml';
COMMENT ON COLUMN loadline.exposure.maturity IS 'last day of the facility; after it undrawn counts as 0; null: no end';
COMMENT ON COLUMN loadline.exposure.booked_at IS 'when the facility or trade was booked';
COMMENT ON COLUMN loadline.exposure.large_exposure_value IS 'value for large exposure reporting as the firm computed it, units of currency';

CREATE TABLE loadline.fx_rate (
    currency      text    NOT NULL,
    quoted_on     date    NOT NULL,
    base_per_unit numeric NOT NULL,
    CONSTRAINT fx_rate_key PRIMARY KEY (currency, quoted_on)
);
COMMENT ON TABLE  loadline.fx_rate IS 'exchange rates into the base currency; the newest that is not in the future rules';
COMMENT ON COLUMN loadline.fx_rate.currency IS 'ISO 4217; the base currency needs no row';
COMMENT ON COLUMN loadline.fx_rate.quoted_on IS 'day of the quotation';
COMMENT ON COLUMN loadline.fx_rate.base_per_unit IS 'units of base currency for one unit of currency, above 0';

CREATE TABLE loadline.capital (
    kind   text    NOT NULL,
    as_of  date    NOT NULL,
    amount numeric NOT NULL,
    CONSTRAINT capital_key PRIMARY KEY (kind, as_of),
    CONSTRAINT capital_kind CHECK (kind IN ('tier1', 'own_funds'))
);
COMMENT ON TABLE  loadline.capital IS 'the firm''s own capital, which limits are measured against; the newest that is not in the future rules';
COMMENT ON COLUMN loadline.capital.kind IS 'tier1 or own_funds';
COMMENT ON COLUMN loadline.capital.as_of IS 'day from which the amount holds';
COMMENT ON COLUMN loadline.capital.amount IS 'units of base currency, above 0';
