-- A change is served in two tiers. A touched assessment commits at once what the changed
-- counterparties have by themselves; a whole one follows with what depends on the whole book: totals
-- and contributions.

ALTER TABLE loadline.assessment
    ALTER COLUMN loss_quantile DROP NOT NULL,
    ALTER COLUMN credit_var DROP NOT NULL,
    ALTER COLUMN expected_shortfall DROP NOT NULL,
    ALTER COLUMN loss_quantile_error DROP NOT NULL,
    ALTER COLUMN credit_var_error DROP NOT NULL,
    ALTER COLUMN expected_shortfall_error DROP NOT NULL,
    ALTER COLUMN plan DROP NOT NULL,
    ADD CONSTRAINT assessment_whole_has_all CHECK (
        num_nulls(loss_quantile, credit_var, expected_shortfall, loss_quantile_error, credit_var_error,
                  expected_shortfall_error, plan) = CASE scope WHEN 'whole' THEN 0 ELSE 7 END);
COMMENT ON COLUMN loadline.assessment.scope IS 'whole: every figure is new; touched: those that changed counterparties have by themselves are, and a whole one follows';
COMMENT ON COLUMN loadline.assessment.engine IS 'how the loss distribution was computed; closed form: it was not, the assessment is touched';
COMMENT ON COLUMN loadline.assessment.loss_quantile IS 'smallest loss that is not exceeded with probability confidence, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.credit_var IS 'loss_quantile less expected_loss, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.expected_shortfall IS 'mean loss of the worst (1 - confidence) of cases, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.loss_quantile_error IS 'one standard error, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.credit_var_error IS 'one standard error, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.expected_shortfall_error IS 'one standard error, base currency; null where touched';
COMMENT ON COLUMN loadline.assessment.plan IS 'how the figures were reached; the same book and plan give the same bits; null where touched';

-- The newest plan of a model is asked for at every start, among many touched assessments.
CREATE INDEX assessment_whole_by_model ON loadline.assessment (model_digest, sequence) WHERE scope = 'whole';

ALTER TABLE loadline.counterparty_risk
    ALTER COLUMN var_contribution DROP NOT NULL,
    ALTER COLUMN var_contribution_error DROP NOT NULL,
    ALTER COLUMN es_contribution DROP NOT NULL,
    ALTER COLUMN es_contribution_error DROP NOT NULL,
    ADD CONSTRAINT counterparty_risk_contributions_together CHECK (
        num_nulls(var_contribution, var_contribution_error, es_contribution, es_contribution_error) IN (0, 4));
COMMENT ON COLUMN loadline.counterparty_risk.var_contribution IS 'its part of credit VaR at the last whole assessment; the parts sum to it; base currency; null: none since it is here';
COMMENT ON COLUMN loadline.counterparty_risk.var_contribution_error IS 'one standard error, base currency; null with var_contribution';
COMMENT ON COLUMN loadline.counterparty_risk.es_contribution IS 'its part of expected shortfall at the last whole assessment; the parts sum to it; base currency; null: none since it is here';
COMMENT ON COLUMN loadline.counterparty_risk.es_contribution_error IS 'one standard error, base currency; null with es_contribution';
COMMENT ON COLUMN loadline.limit_usage.assessment_id IS 'the assessment that wrote the row; a limit on contributions is held by whole ones alone';
