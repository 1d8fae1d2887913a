-- The demo's book: Kestrelmoor Bank, an invented lender, and invented counterparties. Every "random"
-- choice is a fixed hash of what it is for, so the book is the same wherever and whenever it is made;
-- dates are counted back from today, so nothing in it is ever too old.
--
--     psql --set ON_ERROR_STOP=1 --file sql/demo_book.sql

BEGIN;
SET LOCAL TIME ZONE 'Europe/Vienna';

-- A number in [0, 1), even, and the same for the same key for ever.
CREATE FUNCTION pg_temp.chance(key text) RETURNS double precision
LANGUAGE sql IMMUTABLE AS $$
    SELECT ('x' || left(encode(sha256(convert_to(key, 'UTF8')), 'hex'), 8))::bit(32)::bigint / 4294967296.0::double precision
$$;

-- One of the words of a list, each as likely as it is often in it; + stands for a space in a word.
CREATE FUNCTION pg_temp.pick(key text, words text) RETURNS text
LANGUAGE sql IMMUTABLE AS $$
    SELECT replace(w[1 + floor(pg_temp.chance(key) * cardinality(w))::integer], '+', ' ')
    FROM string_to_array(words, ' ') AS w
$$;

-- The check digits of an LEI of 18 characters, by ISO 17442: the whole is 1 modulo 97, A counting 10.
CREATE FUNCTION pg_temp.check_digits(lei text) RETURNS text
LANGUAGE sql IMMUTABLE AS $$
    SELECT lpad((98 - string_agg(CASE WHEN c ~ '[0-9]' THEN c ELSE (ascii(c) - 55)::text END, '' ORDER BY nth)::numeric % 97)::text, 2, '0')
    FROM string_to_table(lei || '00', NULL) WITH ORDINALITY AS t (c, nth)
$$;

-- The plan: 1,500 names, and the exposure at default each is to have. Place 0 to 329 are banks, funds
-- and public bodies, the largest first, by a rank-size law; the others are companies, who stay inside
-- what the bank grants their grade, but for a few.
CREATE TEMPORARY TABLE plan ON COMMIT DROP AS
WITH placed AS (
    SELECT n, 'C' || lpad(n::text, 4, '0') AS counterparty_id, (n * 613) % 1500 AS place FROM generate_series(1, 1500) AS n
), segmented AS (
    SELECT *, CASE WHEN place >= 330 THEN 'corporate'
                   WHEN place % 10 < 5 THEN 'bank'
                   WHEN place % 10 < 9 THEN 'fund'
                   ELSE 'sovereign' END AS segment
    FROM placed
), graded AS (
    SELECT *, CASE segment
            WHEN 'corporate' THEN 1 + width_bucket(pg_temp.chance('grade ' || n), ARRAY[0.08, 0.25, 0.52, 0.77, 0.91, 0.997])
            WHEN 'bank' THEN 1 + width_bucket(pg_temp.chance('grade ' || n),
                CASE WHEN place < 60 THEN ARRAY[0.5] ELSE ARRAY[0.25, 0.65, 0.93] END)
            WHEN 'fund' THEN 2 + width_bucket(pg_temp.chance('grade ' || n),
                CASE WHEN place < 60 THEN ARRAY[0.6] ELSE ARRAY[0.25, 0.65, 0.93] END)
            ELSE 1 + width_bucket(pg_temp.chance('grade ' || n), ARRAY[0.7]) END AS grade_rank,
        CASE segment
            WHEN 'corporate' THEN pg_temp.pick('sector ' || n,
                'AGRI CONSTR CONSTR ENERGY ENERGY HEALTH MANUF MANUF MANUF MANUF REALEST REALEST REALEST RETAIL RETAIL TRANSP FINANCE')
            WHEN 'sovereign' THEN NULL
            ELSE 'FINANCE' END AS sector,
        pg_temp.pick('country ' || n,
            'AT AT AT AT AT DE DE DE DE DE IT IT IT CZ CZ PL PL FR FR NL CH CH') AS country
    FROM segmented
)
SELECT *, 1e6 * CASE
        WHEN segment <> 'corporate' THEN 3300.0 / (place + 10)
        WHEN grade_rank = 7 THEN 0.4 + 1.2 * pg_temp.chance('size ' || n)
        ELSE (ARRAY[60, 45, 30, 18, 9, 3])[grade_rank] * CASE
            WHEN place < 332 THEN 1.04 + 0.03 * (place - 330)                      -- two over their grade's level
            WHEN place < 337 THEN 0.87 + 0.02 * (place - 332)                      -- five near it
            ELSE 0.05 + 0.77 * power(pg_temp.chance('size ' || n), 1.6) END
        END AS target
FROM graded;

-- Two odd ones, which every book has: 340 is not rated, 341 is in default.
UPDATE plan SET grade_rank = NULL, target = 4.2e6 WHERE place = 340;
UPDATE plan SET grade_rank = 8, target = 6.8e6 WHERE place = 341;

INSERT INTO loadline.counterparty (counterparty_id, legal_name, segment, sector, country, country_of_risk, lei, asset_correlation)
SELECT counterparty_id,
    -- 40 x 40 made-up words, each pair once
    split_part(
        'Ambr Arvel Bald Brisk Cald Corv Dalm Drav Elv Esk Farn Fenn Galdr Grest Halv Hesp Ilm Istr Jarn Jess '
        'Keld Korv Lanth Lorr Marv Merr Nald Norv Ostr Orm Palv Pendr Quil Rask Rov Salm Stenn Tav Thess Ulv',
        ' ', 1 + (n * 739) % 1600 / 40)
    || split_part(
        'addin ango arkel avoy aric ebrid ecomar edessa edorrin elisk emble endal erris ifandel igorn ihollin idane imbra indor ispen '
        'okaddel olomar olusk omandir omirrow onessim onolk ombrel ossard opardel urendal urissom usadow usombel utarrin utolvic '
        'ubrin uvannick uwesk uzandel',
        ' ', 1 + (n * 739) % 40)
    || ' ' || CASE segment
        WHEN 'bank' THEN 'Bank'
        WHEN 'fund' THEN pg_temp.pick('fund ' || n, 'Credit+Fund Growth+Fund Income+Fund Infrastructure+Fund Pension+Fund')
        WHEN 'sovereign' THEN pg_temp.pick('body ' || n, 'Region City Water+Board Development+Agency')
        ELSE pg_temp.pick('trade ' || n, CASE sector
            WHEN 'AGRI' THEN 'Farms Dairy Seeds'
            WHEN 'CONSTR' THEN 'Construction Bridges Civil+Works'
            WHEN 'ENERGY' THEN 'Power Grid Hydro'
            WHEN 'FINANCE' THEN 'Leasing Factoring'
            WHEN 'HEALTH' THEN 'Clinics Medical Laboratories'
            WHEN 'MANUF' THEN 'Machines Castings Tools Glass Paper'
            WHEN 'REALEST' THEN 'Estates Properties Offices'
            WHEN 'RETAIL' THEN 'Stores Markets Fashion'
            ELSE 'Rail Freight Shipping' END) END
    || CASE WHEN segment IN ('fund', 'sovereign') THEN ''
            WHEN country = 'IT' THEN ' SpA'
            WHEN country = 'CZ' THEN ' a.s.'
            WHEN country = 'PL' THEN ' S.A.'
            WHEN country = 'FR' THEN ' SA'
            WHEN country = 'NL' THEN ' N.V.'
            WHEN segment = 'bank' OR target > 1e7 THEN ' AG'
            ELSE ' GmbH' END,
    segment, sector, country,
    CASE WHEN pg_temp.chance('risk abroad ' || n) < 0.04 THEN pg_temp.pick('country of risk ' || n, 'AT DE IT CZ PL FR NL CH') END,
    CASE WHEN segment <> 'sovereign' AND pg_temp.chance('lei ' || n) < 0.7 THEN stem || pg_temp.check_digits(stem) END,
    CASE WHEN pg_temp.chance('correlation ' || n) < 0.02 THEN 0.15 + round(pg_temp.chance('how much ' || n)::numeric, 1) / 5 END
FROM plan, LATERAL (SELECT 'XKMB00' || upper(left(encode(sha256(convert_to('lei ' || n, 'UTF8')), 'hex'), 12)) AS stem) AS s;

-- 120 groups of two to five; group 1 joins two large banks; some names are in two groups.
INSERT INTO loadline.connected_group (group_id, name)
SELECT 'G' || lpad(g::text, 3, '0'), split_part(c.legal_name, ' ', 1) || ' group'
FROM generate_series(1, 120) AS g
JOIN plan AS p ON p.place = CASE WHEN g = 1 THEN 2 ELSE 350 + g * 9 END
JOIN loadline.counterparty AS c USING (counterparty_id);

INSERT INTO loadline.group_member (group_id, counterparty_id, tie, valid_from, valid_until)
SELECT 'G' || lpad(g::text, 3, '0'), p.counterparty_id,
    CASE WHEN pg_temp.chance('tie ' || g || ' ' || m) < 0.75 THEN 'control' ELSE 'economic' END,
    current_date - 200 - floor(2000 * pg_temp.chance('member since ' || g || ' ' || m))::integer,
    CASE WHEN m = 4 AND g % 15 = 0 THEN current_date - 30 END
FROM generate_series(1, 120) AS g CROSS JOIN generate_series(1, 4) AS m
JOIN plan AS p ON p.place = CASE WHEN g = 1 THEN (ARRAY[2, 10])[m] ELSE 350 + g * 9 + m - 1 END
WHERE g = 1 OR m <= 2 + floor(3 * pg_temp.chance('members ' || g))::integer
UNION ALL
SELECT 'G' || lpad((1 + g % 120)::text, 3, '0'), p.counterparty_id, 'economic', current_date - 150, NULL
FROM generate_series(10, 119, 10) AS g JOIN plan AS p ON p.place = 350 + g * 9;

-- Three internal ratings each, the last of them within a year; agencies rate banks, public bodies and
-- large companies, and differ by a grade now and then. Two names have an agency's rating alone.
INSERT INTO loadline.rating (counterparty_id, source, rated_at, grade, outlook, recorded_at)
SELECT counterparty_id, source, rated_at,
    CASE WHEN rank = 8 THEN 'default' ELSE 'G' || rank END,
    CASE WHEN nth = 1 THEN pg_temp.pick('outlook ' || n, 'stable stable stable stable positive negative') END,
    rated_at + interval '2 hours'
FROM (
    SELECT n, counterparty_id, source, nth,
        current_date + time '09:00' - make_interval(
            days => 20 + floor(330 * pg_temp.chance('rated ' || source || n))::integer + 365 * (nth - 1)) AS rated_at,
        CASE WHEN nth = 1 AND source = 'internal' THEN grade_rank
             ELSE least(7, greatest(1, grade_rank
                + CASE WHEN pg_temp.chance('worse ' || source || n || nth) < 0.25 THEN 1 ELSE 0 END
                - CASE WHEN pg_temp.chance('better ' || source || n || nth) < 0.2 THEN 1 ELSE 0 END)) END AS rank
    FROM plan CROSS JOIN generate_series(1, 3) AS nth CROSS JOIN (VALUES ('internal'), ('agency')) AS s (source)
    WHERE CASE WHEN place IN (342, 343) THEN source = 'agency'
               WHEN source = 'internal' THEN grade_rank IS NOT NULL
               ELSE grade_rank < 8 AND (segment IN ('bank', 'sovereign') OR segment = 'corporate' AND target > 25e6) END
) AS r;

-- 3,500 facilities: one each, the others at random. What they add up to is the plan's target.
CREATE TEMPORARY TABLE facility_plan ON COMMIT DROP AS
WITH placed AS (
    SELECT f, CASE WHEN f <= 1500 THEN f ELSE 1 + floor(1500 * pg_temp.chance('owner ' || f))::integer END AS n
    FROM generate_series(1, 3500) AS f
), described AS (
    SELECT f, p.*,
        pg_temp.pick('product ' || f, CASE segment
            WHEN 'corporate' THEN 'term_loan term_loan term_loan term_loan term_loan revolver revolver revolver revolver '
                                  'guarantee uncommitted bond derivative'
            WHEN 'bank' THEN 'derivative derivative derivative bond bond term_loan guarantee'
            WHEN 'fund' THEN 'derivative derivative revolver uncommitted'
            ELSE 'bond bond term_loan' END) AS product,
        pg_temp.pick('currency ' || f, 'EUR EUR EUR EUR EUR EUR EUR USD USD CHF GBP') AS currency,
        0.3 + pg_temp.chance('weight ' || f) AS weight
    FROM placed JOIN plan AS p USING (n)
)
SELECT *, target * weight / sum(weight) OVER (PARTITION BY n) AS share,
    CASE WHEN product = 'term_loan' AND pg_temp.chance('secured ' || f) < 0.3 THEN 0.4 ELSE 0 END AS secured,
    CASE currency WHEN 'USD' THEN 0.92 WHEN 'CHF' THEN 1.05 WHEN 'GBP' THEN 1.16 ELSE 1 END AS rate,
    count(*) OVER same AS in_set, row_number() OVER (same ORDER BY f) AS nth,
    sum(weight) OVER same AS set_weight, first_value(weight) OVER (same ORDER BY f) AS first_weight
FROM described WINDOW same AS (PARTITION BY n, product);

-- Derivatives of a name net against each other: where there are two or more, the first is worth half of
-- the set's exposure to the counterparty, and the others carry it with their add-on.
INSERT INTO loadline.exposure (
    exposure_id, counterparty_id, product, currency, drawn, undrawn, committed, add_on, collateral, netting_set,
    loss_given_default, maturity)
SELECT 'F' || lpad(f::text, 5, '0'), counterparty_id, product, currency,
    round((part * drawn)::numeric / rate, -3),
    round((part * undrawn)::numeric / rate, -3),
    product <> 'uncommitted',
    round((part * add_on)::numeric / rate, -3),
    round((part * secured)::numeric / rate, -3),
    CASE WHEN product = 'derivative' THEN 'N' || substr(counterparty_id, 2) END,
    CASE WHEN secured > 0 OR segment = 'corporate' AND pg_temp.chance('lgd ' || f) < 0.5
        THEN 0.25 + floor(8 * pg_temp.chance('how lossy ' || f)) / 20 END,
    CASE WHEN f IN (77, 1234) THEN current_date - 9     -- past its day and not yet repaid
         WHEN product <> 'uncommitted' THEN
            current_date + 40 + floor(3000 * power(pg_temp.chance('maturity ' || f), 2))::integer END
FROM facility_plan, LATERAL (
    SELECT
        CASE product
            WHEN 'derivative' THEN CASE WHEN in_set = 1 THEN 0.75
                                        WHEN nth = 1 THEN -0.5
                                        ELSE 1.25 * weight / (set_weight - first_weight) END
            WHEN 'revolver' THEN 0.6
            WHEN 'guarantee' THEN 0
            WHEN 'uncommitted' THEN 0.9
            ELSE 1 + secured END,
        CASE product WHEN 'revolver' THEN 0.8 WHEN 'guarantee' THEN 1 WHEN 'uncommitted' THEN 1 ELSE 0 END,
        CASE product WHEN 'derivative' THEN 0.25 / in_set ELSE 0 END,
        CASE product WHEN 'derivative' THEN share * set_weight / weight ELSE share END
    ) AS parts (drawn, undrawn, add_on, part);

-- Ninety days of rates, which end where the plan's do.
INSERT INTO loadline.fx_rate (currency, quoted_on, base_per_unit)
SELECT currency, current_date - d,
    round((rate * (1 + CASE WHEN d = 0 THEN 0
                            ELSE 0.0004 * d * (pg_temp.chance(currency) - 0.5) + 0.006 * (pg_temp.chance(currency || d) - 0.5) END))::numeric, 5)
FROM (VALUES ('USD', 0.92), ('CHF', 1.05), ('GBP', 1.16)) AS r (currency, rate) CROSS JOIN generate_series(0, 89) AS d
WHERE d = 0 OR extract(isodow FROM current_date - d) < 6;

INSERT INTO loadline.capital (kind, as_of, amount)
SELECT kind, current_date - 20 - 91 * quarter, amount * (1 - 0.01 * quarter)
FROM (VALUES ('tier1', 1.9e9), ('own_funds', 2.3e9)) AS c (kind, amount) CROSS JOIN generate_series(0, 3) AS quarter;

COMMIT;

ANALYZE loadline.counterparty, loadline.connected_group, loadline.group_member, loadline.rating,
    loadline.exposure, loadline.fx_rate, loadline.capital;
