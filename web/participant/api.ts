// Calls of the server. An answer that will never change is Refused; everything
// else may be tried again.

import { Refused } from "./outbox.js";

export async function call(method: "GET" | "POST", path: string, options: { token?: string; body?: unknown; key?: string } = {}): Promise<unknown> {
  const headers: Record<string, string> = { Accept: "application/json" };
  if (options.body !== undefined) headers["Content-Type"] = "application/json";
  if (options.token) headers["Authorization"] = `Bearer ${options.token}`;
  if (options.key) headers["Idempotency-Key"] = options.key;
  const response = await fetch(path, {
    method,
    headers,
    body: options.body === undefined ? null : JSON.stringify(options.body),
    signal: AbortSignal.timeout(20_000),
    credentials: "same-origin",
  });
  const answer: unknown = await response.json().catch(() => null);
  if (response.ok) return answer;
  const error = (answer as { error?: { code?: string; message?: string } } | null)?.error;
  const message = error?.message ?? `status ${response.status}`;
  if (response.status >= 400 && response.status < 500 && response.status !== 408 && response.status !== 429) throw new Refused(error?.code ?? "", message);
  throw new Error(message);
}
