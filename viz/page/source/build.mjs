// Bundles the page's script and style, once, into the two files that ship with the package.
//
// The outcome is a classic script: modules do not load from file://. The licence texts of what is bundled go
// into it as a comment, because every page carries a copy, and into licences.txt beside it. The first line
// holds a hash of the sources, by which a test tells a bundle that was forgotten.

import { createHash } from "node:crypto";
import { readFileSync, readdirSync, writeFileSync } from "node:fs";
import { build } from "esbuild";

const OUT = new URL("..", import.meta.url).pathname;
const HERE = new URL(".", import.meta.url).pathname;
const BUNDLED = ["three", "uplot"];

const sources = readdirSync(HERE)
  .filter((name) => /\.(js|mjs|css|json)$/.test(name) && name !== "package-lock.json")
  .sort();
const hash = createHash("sha256");
for (const name of sources) hash.update(name + "\n").update(readFileSync(HERE + name));
const stamp = `sources ${hash.digest("hex")}`;

const licences = BUNDLED.map((name) => {
  const { version } = JSON.parse(readFileSync(`${HERE}node_modules/${name}/package.json`, "utf8"));
  const text = readFileSync(`${HERE}node_modules/${name}/LICENSE`, "utf8").trim();
  return `${name} ${version}\n\n${text}\n`;
}).join("\n");
writeFileSync(`${OUT}licences.txt`, licences);

const shared = { bundle: true, minify: true, write: false, legalComments: "none", target: "es2022" };
const script = await build({
  ...shared,
  entryPoints: [`${HERE}main.js`],
  format: "iife",
  charset: "ascii",
});
const style = await build({ ...shared, entryPoints: [`${HERE}page.css`] });

const comment = `/* ${stamp} */\n/*\n${licences}*/\n`;
// Nothing in it may look like the end of the script element that holds it, or like the start of a comment there.
const safe = (text) => text.replaceAll("</script", "<\\/script").replaceAll("<!--", "<\\!--");
writeFileSync(`${OUT}page.js`, comment + safe(script.outputFiles[0].text));
writeFileSync(`${OUT}page.css`, `/* ${stamp} */\n${style.outputFiles[0].text}`);
