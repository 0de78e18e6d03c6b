// Verifies a bundle before anything is shown: signature (ES256 over a JWT whose
// claims name the digests), the bundle's own digest, and those of the files
// that this page really loaded.

const encoder = new TextEncoder();

/** Something is not what was signed; the message names it. */
export class NotVerified extends Error {}

/** SHA-256 in hexadecimal. */
export async function sha256(bytes: BufferSource): Promise<string> {
  const sum = new Uint8Array(await crypto.subtle.digest("SHA-256", bytes));
  return Array.from(sum, (b) => b.toString(16).padStart(2, "0")).join("");
}

function fromBase64url(s: string): Uint8Array<ArrayBuffer> {
  const text = atob(s.replaceAll("-", "+").replaceAll("_", "/"));
  return Uint8Array.from(text, (c) => c.charCodeAt(0));
}

function decode(part: string): Record<string, unknown> {
  return JSON.parse(new TextDecoder().decode(fromBase64url(part))) as Record<string, unknown>;
}

/** A bundle's text and the compact JWS over its digests. */
export interface SignedBundle {
  bundle: string;
  signature: string;
}

type Digests = Record<string, string>;

/**
 * Checks the signature against published keys and gives the digests of the
 * assets. Whatever is wrong, even what cannot be read at all, is NotVerified.
 */
export async function verifyBundle(signed: SignedBundle, keys: JsonWebKey[], digest: string): Promise<Digests> {
  const claims = await verifySignature(signed.signature, keys).catch((e: unknown) => {
    throw e instanceof NotVerified ? e : new NotVerified("signature");
  });
  const audience: unknown[] = Array.isArray(claims["aud"]) ? claims["aud"] : [claims["aud"]];
  if (claims["iss"] !== "distal" || !audience.includes("distal-bundle")) throw new NotVerified("claims");
  const expires = claims["exp"];
  if (expires !== undefined && !(typeof expires === "number" && expires * 1000 > Date.now())) throw new NotVerified("claims");
  const own = await sha256(encoder.encode(signed.bundle));
  if (own !== claims["bundle"] || own !== digest) throw new NotVerified("bundle");
  // The text is what was signed, so it can be read.
  const inside = (JSON.parse(signed.bundle) as { assets: Digests }).assets;
  const assets = (claims["assets"] ?? {}) as Digests;
  for (const name of ["engine", "participant_js", "participant_css"]) {
    if (!assets[name] || inside[name] !== assets[name]) throw new NotVerified(name);
  }
  return assets;
}

async function verifySignature(jws: string, keys: JsonWebKey[]): Promise<Record<string, unknown>> {
  const parts = jws.split(".");
  if (parts.length !== 3) throw new NotVerified("signature");
  const [head, body, signature] = parts as [string, string, string];
  const header = decode(head);
  const jwk = keys.find((k) => (k as { kid?: string }).kid === header["kid"]);
  if (header["alg"] !== "ES256" || !jwk) throw new NotVerified("key");
  const { kty, crv, x, y } = jwk;
  const key = await crypto.subtle.importKey("jwk", { kty, crv, x, y } as JsonWebKey, { name: "ECDSA", namedCurve: "P-256" }, false, ["verify"]);
  const good = await crypto.subtle.verify({ name: "ECDSA", hash: "SHA-256" }, key, fromBase64url(signature), encoder.encode(`${head}.${body}`));
  if (!good) throw new NotVerified("signature");
  return decode(body);
}

/** Fetches a file and compares it with its signed digest. */
export async function fetchVerified(address: string, digest: string, name: string): Promise<ArrayBuffer> {
  const response = await fetch(address, { cache: "force-cache" });
  if (!response.ok) throw new Error(`${name}: ${response.status}`);
  const bytes = await response.arrayBuffer();
  if ((await sha256(bytes)) !== digest) throw new NotVerified(name);
  return bytes;
}
