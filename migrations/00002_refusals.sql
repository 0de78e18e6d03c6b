-- +goose Up

-- The first form of this function looked for run_id in tables that have none,
-- so that a change of the ledger failed with a misleading error.
-- +goose StatementBegin
CREATE OR REPLACE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    IF TG_OP = 'DELETE' AND TG_TABLE_NAME IN ('records', 'consents', 'trials', 'exclusions') THEN
        IF current_setting('distal.withdrawal', true) = OLD.run_id::text THEN
            RETURN OLD;
        END IF;
    END IF;
    RAISE EXCEPTION '% is append-only', TG_TABLE_NAME USING ERRCODE = 'restrict_violation', CONSTRAINT = TG_TABLE_NAME || '_append_only';
END $$;
-- +goose StatementEnd
