import assert from "node:assert/strict";
import { before, test } from "node:test";

import { fetchVerified, NotVerified, sha256, verifyBundle, type SignedBundle } from "./verify.js";

const bytes = (s: string): Uint8Array<ArrayBuffer> => new Uint8Array(new TextEncoder().encode(s));
const base64url = (b: Uint8Array | string): string => Buffer.from(b as Uint8Array).toString("base64url");

const assets = { engine: "e".repeat(64), participant_js: "a".repeat(64), participant_css: "c".repeat(64) };
const text = JSON.stringify({ assets, format: 1, study: { about: { title: "Dots" } } });

let pair: CryptoKeyPair;
let jwk: JsonWebKey & { kid: string };
let digest: string;

before(async () => {
  pair = await crypto.subtle.generateKey({ name: "ECDSA", namedCurve: "P-256" }, true, ["sign", "verify"]);
  jwk = { ...(await crypto.subtle.exportKey("jwk", pair.publicKey)), kid: "key-1" };
  digest = await sha256(bytes(text));
});

async function sign(changes: { header?: object; claims?: object } = {}): Promise<SignedBundle> {
  const head = base64url(JSON.stringify({ alg: "ES256", typ: "JWT", kid: "key-1", ...changes.header }));
  const body = base64url(JSON.stringify({ iss: "distal", aud: ["distal-bundle"], sub: "dots", bundle: digest, assets, iat: 1, jti: "1", ...changes.claims }));
  const signature = await crypto.subtle.sign({ name: "ECDSA", hash: "SHA-256" }, pair.privateKey, bytes(`${head}.${body}`));
  return { bundle: text, signature: `${head}.${body}.${base64url(new Uint8Array(signature))}` };
}

const flip = (s: string, at: number): string => s.slice(0, at) + (s[at] === "A" ? "B" : "A") + s.slice(at + 1);

test("SHA-256 agrees with the example of FIPS 180-4", async () => {
  assert.equal(await sha256(bytes("abc")), "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
});

test("takes a good bundle and gives its assets", async () => {
  assert.deepEqual(await verifyBundle(await sign(), [{ ...jwk, kid: "key-0" } as JsonWebKey, jwk], digest), assets);
});

// RFC 7515, appendix A.3: an ES256 signature made elsewhere. Its claims are not
// those of a bundle, so the refusal must come after the signature was accepted.
test("accepts the signature of RFC 7515, A.3", async () => {
  const key = {
    kty: "EC", crv: "P-256", x: "f83OJ3D2xF1Bg8vub9tLe1gHMzV76e8Tus9uPHvRVEU", y: "x_FEzRu9m36HLN_tue659LNpXW6pCyStikYjKIWI5a0",
  };
  const signed = {
    bundle: text,
    signature: "eyJhbGciOiJFUzI1NiJ9.eyJpc3MiOiJqb2UiLA0KICJleHAiOjEzMDA4MTkzODAsDQogImh0dHA6Ly9leGFtcGxlLmNvbS9pc19yb290Ijp0cnVlfQ."
      + "DtEhU3ljbEg8L38VWAfUAqOyKAM6-Xx-F4GawxaepmXFCgfTjDxw5djxLa8ISlSApmWQxfKTUJqPP3-Kg6NU1Q",
  };
  await assert.rejects(verifyBundle(signed, [key], digest), new NotVerified("claims"));
});

const refused: { given: string; when: (good: SignedBundle) => Promise<unknown>; expect: string }[] = [
  { given: "a changed byte of the study", when: (g) => verifyBundle({ ...g, bundle: g.bundle.replace("Dots", "Dotz") }, [jwk], digest), expect: "bundle" },
  { given: "another bundle than the page names", when: (g) => verifyBundle(g, [jwk], "0".repeat(64)), expect: "bundle" },
  { given: "a changed byte of the signature", when: (g) => verifyBundle({ ...g, signature: flip(g.signature, g.signature.length - 20) }, [jwk], digest), expect: "signature" },
  { given: "a changed byte of the claims", when: (g) => verifyBundle({ ...g, signature: flip(g.signature, g.signature.indexOf(".") + 30) }, [jwk], digest), expect: "signature" },
  { given: "a changed byte of the header", when: (g) => verifyBundle({ ...g, signature: flip(g.signature, 0) }, [jwk], digest), expect: "signature" },
  { given: "a signature cut short", when: (g) => verifyBundle({ ...g, signature: g.signature.slice(0, -30) }, [jwk], digest), expect: "signature" },
  { given: "no signature", when: (g) => verifyBundle({ ...g, signature: "" }, [jwk], digest), expect: "signature" },
  { given: "an unknown key", when: (g) => verifyBundle(g, [{ ...jwk, kid: "key-2" } as JsonWebKey], digest), expect: "key" },
  { given: "another algorithm", when: async () => verifyBundle(await sign({ header: { alg: "none" } }), [jwk], digest), expect: "key" },
  { given: "another issuer", when: async () => verifyBundle(await sign({ claims: { iss: "other" } }), [jwk], digest), expect: "claims" },
  { given: "a run token", when: async () => verifyBundle(await sign({ claims: { aud: "distal-run" } }), [jwk], digest), expect: "claims" },
  { given: "an expired signature", when: async () => verifyBundle(await sign({ claims: { exp: 1_000_000_000 } }), [jwk], digest), expect: "claims" },
  { given: "another engine than the bundle names", when: async () => verifyBundle(await sign({ claims: { assets: { ...assets, engine: "f".repeat(64) } } }), [jwk], digest), expect: "engine" },
  { given: "a signature without assets", when: async () => verifyBundle(await sign({ claims: { assets: undefined } }), [jwk], digest), expect: "engine" },
  { given: "something that is no bundle", when: () => verifyBundle({} as SignedBundle, [jwk], digest), expect: "signature" },
];

for (const c of refused) {
  test(`refuses ${c.given}`, async () => assert.rejects(c.when(await sign()), new NotVerified(c.expect)));
}

test("refuses a key of another person", async () => {
  const other = await crypto.subtle.generateKey({ name: "ECDSA", namedCurve: "P-256" }, true, ["sign", "verify"]);
  const key = { ...(await crypto.subtle.exportKey("jwk", other.publicKey)), kid: "key-1" };
  await assert.rejects(verifyBundle(await sign(), [key], digest), new NotVerified("signature"));
});

test("files are compared with their signed digests", async (t) => {
  t.mock.method(globalThis, "fetch", async () => new Response("body of the file"));
  const good = await sha256(bytes("body of the file"));
  assert.equal((await fetchVerified("/assets/x", good, "engine")).byteLength, 16);
  await assert.rejects(fetchVerified("/assets/x", digest, "engine"), new NotVerified("engine"));
});

test("a file that did not arrive is not called unverified", async (t) => {
  t.mock.method(globalThis, "fetch", async () => new Response("", { status: 503 }));
  await assert.rejects(fetchVerified("/assets/x", digest, "engine"), (e) => e instanceof Error && !(e instanceof NotVerified) && /engine: 503/.test(e.message));
});
