// Bundles participant/*.test.ts and workspace/*.test.ts and runs them under
// Node's test runner: `npm test`. Further arguments go to the runner.

import { spawnSync } from "node:child_process";
import { mkdtempSync, readdirSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { build } from "esbuild";

const entries = ["participant", "workspace"].flatMap((folder) => readdirSync(folder).filter((f) => f.endsWith(".test.ts")).map((f) => join(folder, f)));
if (entries.length === 0) throw new Error("no *.test.ts found: run it in the folder web");

const out = mkdtempSync(join(tmpdir(), "distal-node-test-"));
try {
  await build({
    entryPoints: entries, outdir: out, outbase: ".", outExtension: { ".js": ".mjs" }, bundle: true, platform: "node", format: "esm",
    target: "node20", sourcemap: "inline", logLevel: "warning",
  });
  const files = entries.map((e) => join(out, e.replace(/\.ts$/, ".mjs")));
  const { status } = spawnSync(process.execPath, ["--enable-source-maps", "--test", ...process.argv.slice(2), ...files], { stdio: "inherit" });
  process.exitCode = status ?? 1;
} finally {
  rmSync(out, { recursive: true });
}
