// Bundles the Desk's browser side into ../static/desk.js and ../static/desk.css (built, never edited).
import { context, build } from "esbuild";
import { dirname, resolve } from "node:path";
import { fileURLToPath } from "node:url";

const here = dirname(fileURLToPath(import.meta.url));
const options = {
  absWorkingDir: here,
  entryPoints: ["src/desk.ts", "src/desk.css"],
  outdir: resolve(here, "../static"),
  bundle: true,
  minify: true,
  format: "esm",
  platform: "browser",
  target: ["es2022"],
  charset: "utf8",
  legalComments: "none",
  logLevel: "info",
};

if (process.argv.includes("--watch")) {
  await (await context(options)).watch();
} else {
  await build(options);
}
