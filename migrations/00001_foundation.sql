-- +goose Up

-- Every row belongs to a lab. Row-level security shows a transaction only the
-- rows of the lab that it names in distal.lab_id, whatever the query.

CREATE TABLE labs (
    lab_id     uuid PRIMARY KEY,
    name       text NOT NULL CONSTRAINT labs_name_length CHECK (length(name) BETWEEN 1 AND 200),
    created_at timestamptz NOT NULL DEFAULT now()
);

CREATE TABLE people (
    lab_id     uuid NOT NULL REFERENCES labs,
    person_id  uuid NOT NULL,
    name       text NOT NULL CONSTRAINT people_name_length CHECK (length(name) BETWEEN 1 AND 200),
    email      text NOT NULL CONSTRAINT people_email_form CHECK (email ~ '^[^@\s]+@[^@\s]+$'),
    role       text NOT NULL CONSTRAINT people_role_known CHECK (role IN ('researcher', 'admin')),
    active     boolean NOT NULL DEFAULT true,
    created_at timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, person_id),
    CONSTRAINT people_email_once UNIQUE (lab_id, email)
);

-- Tokens that were used once (sign-in links) or revoked (sessions).
CREATE TABLE spent_tokens (
    lab_id     uuid NOT NULL REFERENCES labs,
    token_id   text NOT NULL, -- jti
    reason     text NOT NULL CONSTRAINT spent_tokens_reason_known CHECK (reason IN ('used', 'revoked')),
    expires_at timestamptz NOT NULL,
    PRIMARY KEY (lab_id, token_id)
);

-- Signing keys. The newest signs; the public halves of all stay published.
CREATE TABLE keys (
    lab_id      uuid NOT NULL REFERENCES labs,
    key_id      text NOT NULL,
    public_jwk  jsonb NOT NULL,
    private_key bytea NOT NULL, -- PKCS #8, sealed with the server's secret
    created_at  timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, key_id)
);

CREATE TABLE assets (
    lab_id     uuid NOT NULL REFERENCES labs,
    digest     text NOT NULL CONSTRAINT assets_digest_form CHECK (digest ~ '^[0-9a-f]{64}$'),
    media_type text NOT NULL,
    plain      bytea NOT NULL,
    brotli     bytea NOT NULL,
    PRIMARY KEY (lab_id, digest)
);

CREATE TABLE studies (
    lab_id        uuid NOT NULL REFERENCES labs,
    study_id      uuid NOT NULL,
    link          text NOT NULL CONSTRAINT studies_link_form CHECK (link ~ '^[a-z0-9-]{6,60}$'),
    name          text NOT NULL,
    title         text NOT NULL,
    state         text NOT NULL DEFAULT 'draft' CONSTRAINT studies_state_known CHECK (state IN ('draft', 'open', 'paused', 'closed')),
    quota         integer NOT NULL DEFAULT 0 CONSTRAINT studies_quota_range CHECK (quota >= 0),
    bundle_digest text,
    next_order    integer NOT NULL DEFAULT 0, -- running number of runs: block orders and groups
    created_by    uuid NOT NULL,
    created_at    timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, study_id),
    CONSTRAINT studies_link_once UNIQUE (link),
    CONSTRAINT studies_open_has_bundle CHECK (state = 'draft' OR bundle_digest IS NOT NULL),
    FOREIGN KEY (lab_id, created_by) REFERENCES people (lab_id, person_id)
);

CREATE TABLE bundles (
    lab_id     uuid NOT NULL,
    digest     text NOT NULL CONSTRAINT bundles_digest_form CHECK (digest ~ '^[0-9a-f]{64}$'),
    study_id   uuid NOT NULL,
    body       text NOT NULL, -- canonical JSON, byte for byte
    signature  text NOT NULL,
    created_at timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, digest),
    FOREIGN KEY (lab_id, study_id) REFERENCES studies (lab_id, study_id)
);

ALTER TABLE studies ADD CONSTRAINT studies_bundle FOREIGN KEY (lab_id, bundle_digest) REFERENCES bundles (lab_id, digest);

CREATE TABLE invitations (
    lab_id        uuid NOT NULL,
    invitation_id uuid NOT NULL,
    study_id      uuid NOT NULL,
    label         text NOT NULL DEFAULT '' CONSTRAINT invitations_label_length CHECK (length(label) <= 200),
    revoked       boolean NOT NULL DEFAULT false,
    created_by    uuid NOT NULL,
    created_at    timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, invitation_id),
    FOREIGN KEY (lab_id, study_id) REFERENCES studies (lab_id, study_id),
    FOREIGN KEY (lab_id, created_by) REFERENCES people (lab_id, person_id)
);

CREATE TABLE runs (
    lab_id          uuid NOT NULL,
    run_id          uuid NOT NULL,
    study_id        uuid NOT NULL,
    bundle_digest   text NOT NULL,
    invitation_id   uuid,
    participant_key text, -- digest of the device marker: says "taken part already"; erased by withdrawal
    creation_key    text NOT NULL, -- made on the device: asking twice makes one run
    seed            text NOT NULL CONSTRAINT runs_seed_form CHECK (seed ~ '^[0-9a-f]{16}$'),
    group_index     integer NOT NULL,
    order_index     integer NOT NULL,
    simulated       boolean NOT NULL DEFAULT false,
    stage           integer NOT NULL DEFAULT 0, -- rank of the furthest record: the order of a run
    sequence        integer NOT NULL DEFAULT 0, -- highest sequence without a gap
    trials          integer NOT NULL DEFAULT 0,
    outcome         text CONSTRAINT runs_outcome_known CHECK (outcome IN ('completed', 'refused', 'withdrawn')),
    completion_code text,
    browser         text NOT NULL DEFAULT '',
    started_at      timestamptz NOT NULL DEFAULT now(),
    updated_at      timestamptz NOT NULL DEFAULT now(),
    finished_at     timestamptz,
    PRIMARY KEY (lab_id, run_id),
    CONSTRAINT runs_created_once UNIQUE (lab_id, creation_key),
    CONSTRAINT runs_once_per_invitation UNIQUE (lab_id, invitation_id),
    FOREIGN KEY (lab_id, study_id) REFERENCES studies (lab_id, study_id),
    FOREIGN KEY (lab_id, bundle_digest) REFERENCES bundles (lab_id, digest),
    FOREIGN KEY (lab_id, invitation_id) REFERENCES invitations (lab_id, invitation_id)
);
CREATE INDEX runs_of_study ON runs (lab_id, study_id, started_at);
CREATE UNIQUE INDEX runs_once_per_device ON runs (lab_id, study_id, participant_key) WHERE participant_key IS NOT NULL AND NOT simulated;

-- A simulated run can never become a human one, nor the reverse.
-- +goose StatementBegin
CREATE FUNCTION refuse_simulated_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    IF NEW.simulated IS DISTINCT FROM OLD.simulated OR NEW.seed IS DISTINCT FROM OLD.seed THEN
        RAISE EXCEPTION 'simulated and seed of a run cannot be changed' USING ERRCODE = 'check_violation', CONSTRAINT = 'runs_simulated_fixed';
    END IF;
    RETURN NEW;
END $$;
-- +goose StatementEnd
CREATE TRIGGER runs_simulated_fixed BEFORE UPDATE ON runs FOR EACH ROW EXECUTE FUNCTION refuse_simulated_change();

-- Everything that was recorded, as it came. Append-only.
CREATE TABLE records (
    lab_id      uuid NOT NULL,
    run_id      uuid NOT NULL,
    sequence    integer NOT NULL CONSTRAINT records_sequence_range CHECK (sequence >= 1),
    kind        text NOT NULL CONSTRAINT records_kind_known CHECK (kind IN ('consent', 'screening', 'card', 'distance',
                    'display_check', 'instructions', 'trial', 'break', 'answers', 'debrief', 'event', 'refusal')),
    body        text NOT NULL, -- canonical JSON
    received_at timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, run_id, sequence),
    FOREIGN KEY (lab_id, run_id) REFERENCES runs (lab_id, run_id)
);

CREATE TABLE consents (
    lab_id       uuid NOT NULL,
    run_id       uuid NOT NULL,
    text_digest  text NOT NULL CONSTRAINT consents_digest_form CHECK (text_digest ~ '^[0-9a-f]{64}$'),
    text_version text NOT NULL,
    language     text NOT NULL,
    consented_at timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, run_id),
    FOREIGN KEY (lab_id, run_id) REFERENCES runs (lab_id, run_id)
);

-- Trials, for counting and looking; the record itself stands in records. The
-- reference to consents makes a trial without a recorded consent impossible.
CREATE TABLE trials (
    lab_id          uuid NOT NULL,
    run_id          uuid NOT NULL,
    sequence        integer NOT NULL,
    trial           integer NOT NULL,
    block           text NOT NULL,
    condition       text NOT NULL,
    practice        boolean NOT NULL,
    is_catch        boolean NOT NULL,
    level           double precision,
    response        text,
    correct         boolean,
    rt_ms           double precision,
    onset_ms        double precision,
    refresh_ms      double precision NOT NULL,
    stimulus_frames integer NOT NULL,
    frame_steps     text NOT NULL,
    dropped_frames  integer NOT NULL,
    jitter_ms       double precision,
    digest          text NOT NULL,
    interrupted     text NOT NULL,
    PRIMARY KEY (lab_id, run_id, sequence),
    CONSTRAINT trials_number_once UNIQUE (lab_id, run_id, trial),
    FOREIGN KEY (lab_id, run_id, sequence) REFERENCES records (lab_id, run_id, sequence),
    CONSTRAINT trials_need_consent FOREIGN KEY (lab_id, run_id) REFERENCES consents (lab_id, run_id)
);

-- Exclusions and re-inclusions, one row each; the newest of each rule holds.
CREATE TABLE exclusions (
    lab_id     uuid NOT NULL,
    run_id     uuid NOT NULL,
    number     bigint GENERATED ALWAYS AS IDENTITY,
    excluded   boolean NOT NULL,
    rule       text NOT NULL, -- '' for a decision by a person
    reason     text NOT NULL CONSTRAINT exclusions_reason_given CHECK (length(reason) BETWEEN 1 AND 2000),
    person_id  uuid, -- NULL: the study's rules
    decided_at timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, run_id, number),
    FOREIGN KEY (lab_id, run_id) REFERENCES runs (lab_id, run_id),
    FOREIGN KEY (lab_id, person_id) REFERENCES people (lab_id, person_id)
);

-- What is left of a withdrawal: that it took place.
CREATE TABLE withdrawals (
    lab_id          uuid NOT NULL,
    run_id          uuid NOT NULL,
    study_id        uuid NOT NULL,
    records_deleted integer NOT NULL,
    withdrawn_at    timestamptz NOT NULL DEFAULT now(),
    PRIMARY KEY (lab_id, run_id),
    FOREIGN KEY (lab_id, run_id) REFERENCES runs (lab_id, run_id)
);

-- Who did what. Each row holds the digest of the row before, so that a change shows.
CREATE TABLE ledger (
    lab_id    uuid NOT NULL REFERENCES labs,
    number    bigint NOT NULL,
    at        timestamptz NOT NULL DEFAULT now(),
    person_id uuid, -- NULL: the server or a participant
    action    text NOT NULL,
    subject   text NOT NULL,
    detail    text NOT NULL, -- canonical JSON
    previous  text NOT NULL,
    digest    text NOT NULL,
    PRIMARY KEY (lab_id, number)
);

-- Append-only tables refuse changes; records, consents and trials may be
-- deleted only by a transaction that says it is a withdrawal.
-- +goose StatementBegin
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    IF TG_OP = 'DELETE' AND TG_TABLE_NAME IN ('records', 'consents', 'trials', 'exclusions')
       AND current_setting('distal.withdrawal', true) = OLD.run_id::text THEN
        RETURN OLD;
    END IF;
    RAISE EXCEPTION '% is append-only', TG_TABLE_NAME USING ERRCODE = 'restrict_violation', CONSTRAINT = TG_TABLE_NAME || '_append_only';
END $$;
-- +goose StatementEnd
CREATE TRIGGER records_append_only BEFORE UPDATE OR DELETE ON records FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER consents_append_only BEFORE UPDATE OR DELETE ON consents FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER trials_append_only BEFORE UPDATE OR DELETE ON trials FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER exclusions_append_only BEFORE UPDATE OR DELETE ON exclusions FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER withdrawals_append_only BEFORE UPDATE OR DELETE ON withdrawals FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER ledger_append_only BEFORE UPDATE OR DELETE ON ledger FOR EACH ROW EXECUTE FUNCTION refuse_change();
CREATE TRIGGER bundles_append_only BEFORE UPDATE OR DELETE ON bundles FOR EACH ROW EXECUTE FUNCTION refuse_change();

-- +goose StatementBegin
DO $$
DECLARE t text;
BEGIN
    FOREACH t IN ARRAY ARRAY['labs', 'people', 'spent_tokens', 'keys', 'assets', 'studies', 'bundles', 'invitations', 'runs',
                             'records', 'consents', 'trials', 'exclusions', 'withdrawals', 'ledger'] LOOP
        EXECUTE format('ALTER TABLE %I ENABLE ROW LEVEL SECURITY', t);
        EXECUTE format('ALTER TABLE %I FORCE ROW LEVEL SECURITY', t);
        EXECUTE format('CREATE POLICY own_lab ON %I USING (lab_id = current_setting(''distal.lab_id'')::uuid)', t);
    END LOOP;
END $$;
-- +goose StatementEnd

-- The few questions that come before the lab is known.
-- +goose StatementBegin
CREATE FUNCTION lab_of_link(wanted text) RETURNS uuid LANGUAGE sql STABLE SECURITY DEFINER SET search_path = public, pg_temp AS $$
    SELECT lab_id FROM studies WHERE link = wanted
$$;
CREATE FUNCTION all_labs() RETURNS SETOF uuid LANGUAGE sql STABLE SECURITY DEFINER SET search_path = public, pg_temp AS $$
    SELECT lab_id FROM labs ORDER BY created_at, lab_id
$$;
CREATE FUNCTION asset_of_digest(wanted text) RETURNS TABLE (media_type text, plain bytea, brotli bytea) LANGUAGE sql STABLE SECURITY DEFINER SET search_path = public, pg_temp AS $$
    SELECT media_type, plain, brotli FROM assets WHERE digest = wanted LIMIT 1
$$;
CREATE FUNCTION bundle_of_digest(wanted text) RETURNS TABLE (lab_id uuid, body text, signature text) LANGUAGE sql STABLE SECURITY DEFINER SET search_path = public, pg_temp AS $$
    SELECT lab_id, body, signature FROM bundles WHERE digest = wanted LIMIT 1
$$;
CREATE FUNCTION public_keys() RETURNS SETOF jsonb LANGUAGE sql STABLE SECURITY DEFINER SET search_path = public, pg_temp AS $$
    SELECT public_jwk FROM keys ORDER BY created_at DESC
$$;
-- +goose StatementEnd

GRANT SELECT, INSERT, UPDATE, DELETE ON ALL TABLES IN SCHEMA public TO distal_server;
REVOKE ALL ON goose_db_version FROM distal_server;
