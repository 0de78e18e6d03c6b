// Verifies a bundle before anything is shown: signature (ES256 over a JWT whose
// claims name the digests), the bundle's own digest, and those of the files
// that this page really loaded.

const encoder = new TextEncoder();

export class NotVerified extends Error {}

export async function sha256(bytes: BufferSource): Promise<string> {
  const sum = new Uint8Array(await crypto.subtle.digest("SHA-256", bytes));
  return Array.from(sum, (b) => b.toString(16).padStart(2, "0")).join("");
}

function fromBase64url(s: string): Uint8Array<ArrayBuffer> {
  const text = atob(s.replaceAll("-", "+").replaceAll("_", "/"));
  return Uint8Array.from(text, (c) => c.charCodeAt(0));
}

interface Claims {
  iss: string;
  aud: string | string[];
  bundle: string;
  assets: Record<string, string>;
}

export interface SignedBundle {
  bundle: string;
  signature: string;
}

/** Checks the signature against published keys and gives the digests of the assets. */
export async function verifyBundle(signed: SignedBundle, keys: JsonWebKey[], digest: string): Promise<Record<string, string>> {
  const parts = signed.signature.split(".");
  if (parts.length !== 3) throw new NotVerified("signature");
  const [head, body, signature] = parts as [string, string, string];
  const header = JSON.parse(new TextDecoder().decode(fromBase64url(head))) as { alg: string; kid: string };
  const jwk = keys.find((k) => (k as { kid?: string }).kid === header.kid);
  if (header.alg !== "ES256" || !jwk) throw new NotVerified("key");
  const { kty, crv, x, y } = jwk;
  const key = await crypto.subtle.importKey("jwk", { kty, crv, x, y } as JsonWebKey, { name: "ECDSA", namedCurve: "P-256" }, false, ["verify"]);
  const good = await crypto.subtle.verify({ name: "ECDSA", hash: "SHA-256" }, key, fromBase64url(signature), encoder.encode(`${head}.${body}`));
  if (!good) throw new NotVerified("signature");
  const claims = JSON.parse(new TextDecoder().decode(fromBase64url(body))) as Claims;
  const audience = Array.isArray(claims.aud) ? claims.aud : [claims.aud];
  if (claims.iss !== "distal" || !audience.includes("distal-bundle")) throw new NotVerified("claims");
  const own = await sha256(encoder.encode(signed.bundle));
  if (own !== claims.bundle || own !== digest) throw new NotVerified("bundle");
  const inside = (JSON.parse(signed.bundle) as { assets: Record<string, string> }).assets;
  for (const name of ["engine", "participant_js", "participant_css"]) {
    if (!claims.assets[name] || inside[name] !== claims.assets[name]) throw new NotVerified(name);
  }
  return claims.assets;
}

/** Fetches a file and compares it with its signed digest. */
export async function fetchVerified(address: string, digest: string, name: string): Promise<ArrayBuffer> {
  const response = await fetch(address, { cache: "force-cache" });
  if (!response.ok) throw new Error(`${name}: ${response.status}`);
  const bytes = await response.arrayBuffer();
  if ((await sha256(bytes)) !== digest) throw new NotVerified(name);
  return bytes;
}
