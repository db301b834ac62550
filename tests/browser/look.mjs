// node look.mjs MODULES CHROMIUM ORIGIN SHOTS: opens every page and fails on what a reader would stumble over.
import assert from "node:assert/strict";
import { mkdirSync, readFileSync } from "node:fs";
import { createRequire } from "node:module";
import { join } from "node:path";

const [modules, executablePath, origin, shots] = process.argv.slice(2);
const require = createRequire(join(modules, "x.js"));
const { chromium } = require(join(modules, "playwright-core"));
const axe = readFileSync(join(modules, "axe-core", "axe.min.js"), "utf8");
mkdirSync(shots, { recursive: true });

const browser = await chromium.launch({ executablePath, args: ["--no-sandbox"] });
const faults = [];
const fault = (text) => { faults.push(text); console.log(`FAULT ${text}`); };

// A page that is watched: nothing in the console, no request beyond the origin.
async function watched(options, what) {
  const context = await browser.newContext(options);
  const page = await context.newPage();
  page.on("console", (line) => {
    // A status that was asked for on purpose is reported by the browser too.
    if (["error", "warning"].includes(line.type()) && !page.expected) fault(`${what}: console: ${line.text()}`);
  });
  page.on("pageerror", (error) => fault(`${what}: ${error}`));
  page.on("request", (request) => {
    if (!request.url().startsWith(origin) && !request.url().startsWith("data:")) fault(`${what}: asks ${request.url()}`);
  });
  return page;
}

const pages = [
  ["streams", "/"],
  ["none", "/?name=nothing-like-it"],
  ["stream", "/stream/catalogue.lookup?give_up_after=200ms"],
  ["long", "/stream/lender.reply"],
  ["week", "/week"],
  ["open", "/open"],
  ["health", "/how-it-is"],
  ["problem", "/stream/nobody"],
];

// Looked at, light and dark, at three widths; axe's rules (WCAG 2.2 A and AA among them) on each.
for (const colorScheme of ["light", "dark"]) {
  for (const width of [320, 1024, 1920]) {
    const page = await watched({ colorScheme, viewport: { width, height: width === 320 ? 640 : 1080 } }, `${colorScheme} ${width}`);
    for (const [name, path] of pages) {
      page.expected = name === "problem";
      const response = await page.goto(origin + path, { waitUntil: "load" });
      assert.equal(response.status(), name === "problem" ? 404 : 200, path);
      if (name === "open") await page.waitForFunction(() => document.getElementById("state").textContent.includes("up to date"));
      await page.screenshot({ path: join(shots, `${name}-${colorScheme}-${width}.png`), fullPage: true });
      const over = await page.evaluate(() => document.documentElement.scrollWidth - document.documentElement.clientWidth);
      if (over > 0) fault(`${path} at ${width}: ${over} px wider than the window`);
      // The policy keeps a script out that is put into the page; this way in is the driver's own.
      await page.evaluate(axe);
      const { violations } = await page.evaluate(() => globalThis.axe.run());
      for (const { id, help, nodes } of violations) {
        fault(`${path} ${colorScheme} ${width}: ${id}: ${help}: ${nodes.slice(0, 3).map((node) => node.html.slice(0, 160)).join(" | ")}`);
      }
    }
    await page.context().close();
  }
}

// By keyboard: the slider answers to arrow keys, the field to Enter.
{
  const page = await watched({ viewport: { width: 1024, height: 800 }, timezoneId: "Asia/Tokyo", locale: "en-GB" }, "keyboard");
  await page.goto(`${origin}/stream/catalogue.lookup`);
  const asked = () => page.locator("tr[data-who=asked] td").first().textContent();
  await page.fill("#after", "300ms");
  await page.press("#after", "Enter");
  await page.waitForFunction(() => document.querySelector("tr[data-who=asked] td").textContent === "300 ms");
  await page.focus("#slide");
  const before = await asked();
  await page.keyboard.press("ArrowRight");
  await page.waitForFunction((text) => document.querySelector("tr[data-who=asked] td").textContent !== text, before);
  assert.match(await page.getAttribute("#slide", "aria-valuetext"), /ms$/);
  // What the script words is what the server words.
  const live = await page.locator("tr[data-who=asked]").innerText();
  await page.reload();
  assert.equal(await page.locator("tr[data-who=asked]").innerText(), live);
  const ring = await page.getAttribute(".own-road .on-wide g.asked", "visibility");
  assert.notEqual(ring, "hidden");
  page.expected = true;
  await page.fill("#after", "soon");
  await page.press("#after", "Enter");
  await page.waitForFunction(() => document.getElementById("wrong").textContent.includes("write 800ms"));
  page.expected = false;
  assert.match(await page.locator("footer time").textContent(), /GMT\+9|JST/);
  const times = await page.evaluate(async () => {
    const found = [];
    for (let i = 0; i < 20; i += 1) {
      const began = performance.now();
      const answer = await fetch(`/v1/streams/catalogue.lookup/whatif?give_up_after=${100 + i}ms`);
      await answer.json();
      found.push(performance.now() - began);
    }
    return found.sort((a, b) => a - b);
  });
  console.log(`what-if: half in ${times[10].toFixed(1)} ms, the slowest of 20 in ${times[19].toFixed(1)} ms`);
  await page.context().close();
}

// The open waits are kept up to date, and can be held.
{
  const page = await watched({ viewport: { width: 1024, height: 800 } }, "live");
  await page.goto(`${origin}/open`);
  const told = () => page.locator("#live time").first().getAttribute("datetime").catch(() => null);
  await page.waitForFunction(() => document.getElementById("state").textContent.includes("up to date"));
  await page.click("#pause");
  assert.equal(await page.locator("#state").textContent(), "Paused.");
  const held = await told();
  await page.waitForTimeout(2500);
  assert.equal(await told(), held);
  await page.click("#pause");
  await page.waitForFunction(() => document.getElementById("state").textContent.includes("up to date"));
  await page.context().close();
}

// Without a script everything is there but the slider.
{
  const page = await watched({ javaScriptEnabled: false, viewport: { width: 1024, height: 800 } }, "no script");
  await page.goto(`${origin}/`);
  await page.fill("#name", "catalogue");
  await page.click("text=Show >> nth=0");
  await page.click("ol.road a");
  assert.equal(await page.locator("h1").textContent(), "catalogue.lookup");
  await page.fill("#after", "250ms");
  await page.click("text=Try it >> nth=-1");
  assert.equal(await page.locator("tr[data-who=asked] td").first().textContent(), "250 ms");
  assert.equal(await page.locator("#slide").isVisible(), false);
  await page.goto(`${origin}/open`);
  assert.equal(await page.locator("#pause").isVisible(), false);
  await page.context().close();
}

// A decision without a script: what is missing is told, what is against a guard is told, what is well is taken, and whoever
// comes too late is told what was decided meanwhile. Looked at with its history.
{
  const page = await watched({ javaScriptEnabled: false, viewport: { width: 1024, height: 800 } }, "decide");
  const late = await watched({ javaScriptEnabled: false, viewport: { width: 1024, height: 800 } }, "late");
  await page.goto(`${origin}/stream/catalogue.lookup`);
  await late.goto(`${origin}/stream/catalogue.lookup`);
  const decide = async (who, kind, why) => {
    await who.check(`input[name=decision][value=${kind}]`);
    await who.fill("#by", "Ada");
    await who.fill("#why", why);
    await who.click("text=Sign it");
  };
  page.expected = late.expected = true;
  await page.fill("#pin", "1ms");
  await decide(page, "pin", "too short");
  assert.match(await page.locator(".settle .wrong").innerText(), /guard: floor/);
  assert.equal(await page.inputValue("#pin"), "1ms");
  await page.screenshot({ path: join(shots, "refused-light-1024.png"), fullPage: true });
  await decide(page, "accept", "agreed on Monday");
  assert.match(page.url(), /\/stream\/catalogue\.lookup#settle-it$/);
  assert.match(await page.locator("section.settle").innerText(), /In force: 400 ms\. Ada accepted 400 ms: agreed on Monday/);
  await decide(late, "refuse", "not now");
  assert.match(await late.locator(".settle .wrong").innerText(), /was decided on meanwhile: accepted 400ms, by Ada/);
  assert.equal(await page.locator(".past .word").count(), 1);
  await page.screenshot({ path: join(shots, "decided-light-1024.png"), fullPage: true });
  await decide(page, "undo", "too many retries");
  assert.match(await page.locator("section.settle").innerText(), /In force by the policy: 800 ms/);
  await page.context().close();
  await late.context().close();
}

// The week, signed in one go.
{
  const page = await watched({ viewport: { width: 1024, height: 800 } }, "sign the week");
  await page.goto(`${origin}/week`);
  const rows = await page.locator("ol.road > li").count();
  assert.ok(rows > 1);
  page.expected = true;
  await page.fill("#by", "Ada");
  await page.fill("#why", "agreed on Monday");
  await page.press("#why", "Enter");
  assert.match(await page.locator("[role=alert]").innerText(), /Nothing is ticked/);
  await page.check("ol.road li:nth-child(2) input[type=checkbox]");
  await page.click("text=Sign those ticked");
  assert.match(await page.locator("[role=status]").innerText(), /One is signed/);
  await page.fill("#by", "Ada");
  await page.fill("#why", "agreed on Monday");
  await page.click("text=/Sign all/");
  await page.screenshot({ path: join(shots, "signed-light-1024.png"), fullPage: true });
  assert.match(await page.locator("[role=status]").innerText(), /signed and in force/);
  page.expected = false;
  const [download] = await Promise.all([page.waitForEvent("download"), page.click("a[href='/v1/weekly?form=html']")]);
  const document = readFileSync(await download.path(), "utf8");
  assert.ok(document.startsWith("<!DOCTYPE html>") && document.includes("Give-up times"));
  await page.context().close();
}

// On paper.
{
  const page = await watched({ viewport: { width: 1024, height: 800 } }, "print");
  await page.goto(`${origin}/stream/catalogue.lookup`);
  await page.emulateMedia({ media: "print" });
  await page.screenshot({ path: join(shots, "stream-print.png"), fullPage: true });
  await page.context().close();
}

await browser.close();
if (faults.length > 0) {
  console.error(`${faults.length} faults:\n${faults.join("\n")}`);
  process.exit(1);
}
console.log("every page is as it should be");
