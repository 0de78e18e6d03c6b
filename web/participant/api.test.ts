import assert from "node:assert/strict";
import { test, type TestContext } from "node:test";

import { call } from "./api.js";
import { Refused } from "./outbox.js";

type Asked = { address: string; options: RequestInit };

function serve(t: TestContext, response: () => Response): Asked[] {
  const asked: Asked[] = [];
  t.mock.method(globalThis, "fetch", async (address: string, options: RequestInit) => {
    asked.push({ address, options });
    return response();
  });
  return asked;
}

const problem = (status: number, code: string): Response => Response.json({ error: { code, message: `about ${code}`, reference: "" } }, { status });

test("sends token, key and body as the server expects them", async (t) => {
  const asked = serve(t, () => Response.json({ acknowledged: 2 }));
  assert.deepEqual(await call("POST", "/api/run/records", { token: "abc", key: "k", body: { records: [] } }), { acknowledged: 2 });
  assert.equal(asked[0]!.address, "/api/run/records");
  assert.deepEqual(asked[0]!.options.headers, {
    Accept: "application/json", "Content-Type": "application/json", Authorization: "Bearer abc", "Idempotency-Key": "k",
  });
  assert.equal(asked[0]!.options.body, '{"records":[]}');
  assert.equal(asked[0]!.options.credentials, "same-origin");
});

test("a call without body sends none", async (t) => {
  const asked = serve(t, () => Response.json({}));
  await call("GET", "/api/keys");
  assert.equal(asked[0]!.options.body, null);
  assert.deepEqual(asked[0]!.options.headers, { Accept: "application/json" });
});

for (const [status, code] of [[400, "body"], [401, "token"], [403, "other_origin"], [404, "not_found"], [409, "taken"], [413, "http"], [422, "record"]] as const) {
  test(`status ${status} is final`, async (t) => {
    serve(t, () => problem(status, code));
    await assert.rejects(call("GET", "/api/run"), (e) => e instanceof Refused && e.code === code && e.message === `about ${code}`);
  });
}

for (const status of [408, 429, 500, 502, 503, 504]) {
  test(`status ${status} may be tried again`, async (t) => {
    serve(t, () => problem(status, "busy"));
    await assert.rejects(call("GET", "/api/run"), (e) => e instanceof Error && !(e instanceof Refused));
  });
}

test("an error page that is no JSON still gives a message", async (t) => {
  serve(t, () => new Response("<html>bad gateway</html>", { status: 502 }));
  await assert.rejects(call("GET", "/api/run"), /status 502/);
});
