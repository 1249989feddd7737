// Parse Power Query (M) files, so that the queries shown are at least well-formed: node pq_parse.cjs FILE.pq ...
const parser = require("@microsoft/powerquery-parser");
const fs = require("node:fs");

(async () => {
  let bad = 0;
  for (const name of process.argv.slice(2)) {
    const text = fs.readFileSync(name, "utf8");
    const result = await parser.TaskUtils.tryLexParse(parser.DefaultSettings, text);
    if (result.resultKind === "Ok") continue;
    bad = 1;
    console.error(`${name}: ${result.error.message}`);
  }
  process.exit(bad);
})();
