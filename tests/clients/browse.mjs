// Open pages of a running service in a real browser without a screen and print what was seen, as JSON:
//   node browse.mjs /usr/bin/chromium http://127.0.0.1:8000 / /docs
// The browser starts with a fresh profile of its own and finds no host but the loopback.
import { chromium } from "playwright-core";

const [executablePath, base, ...paths] = process.argv.slice(2);
const browser = await chromium.launch({
  executablePath,
  headless: true,
  args: [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync", "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1",
  ],
});

function shown() {
  const words = (node) => node.innerText.replaceAll("\u00ad", "").trim();
  return {
    title: document.title,
    text: document.body.innerText,
    links: [...document.links].map((one) => one.getAttribute("href")),
    cards: [...document.querySelectorAll(".card")].map((one) => [words(one.children[0]), words(one.children[1])]),
    sections: [...document.querySelectorAll("section.allocation")].map((section) =>
      [...section.querySelectorAll("table")].map((table) => ({
        caption: words(table.caption),
        rows: [...table.rows].map((row) => [...row.cells].map(words)),
      })),
    ),
  };
}

function backgrounds() {
  const all = [document.documentElement, ...document.querySelectorAll("body, body *")];
  const found = new Set(all.map((one) => getComputedStyle(one).backgroundColor));
  return { body: getComputedStyle(document.body).backgroundColor, all: [...found] };
}

async function visit(path) {
  const page = await browser.newPage({ viewport: { width: 1200, height: 900 }, colorScheme: "dark" });
  const seen = { requests: [], failed: [], errors: [] };
  page.on("request", (request) => seen.requests.push(request.url()));
  page.on("requestfailed", (request) => seen.failed.push(request.url()));
  page.on("response", (answer) => answer.status() >= 400 && seen.failed.push(`${answer.status()} ${answer.url()}`));
  page.on("pageerror", (error) => seen.errors.push(error.message));
  page.on("console", (message) => message.type() === "error" && seen.errors.push(message.text()));
  const answer = await page.goto(base + path, { waitUntil: "networkidle" });
  if (path === "/docs") await page.waitForSelector(".opblock");
  Object.assign(seen, { status: answer.status() }, await page.evaluate(shown));
  await page.emulateMedia({ media: "print" });
  seen.print = await page.evaluate(backgrounds);
  await page.emulateMedia({ media: "screen" });
  seen.screen = await page.evaluate(backgrounds);
  await page.setViewportSize({ width: 360, height: 740 });
  seen.narrow = await page.evaluate(() => document.documentElement.scrollWidth);
  await page.close();
  return seen;
}

try {
  const found = {};
  for (const path of paths) found[path] = await visit(path);
  console.log(JSON.stringify(found));
} finally {
  await browser.close();
}
