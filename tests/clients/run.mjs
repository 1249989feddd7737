// The compiled client against a running service: node run.mjs http://127.0.0.1:8000
import assert from "node:assert/strict";
import { caption, contributions } from "./build/client.js";

const base = process.argv[2];
const measure = { kind: "expected_shortfall", level: 0.75 };
const losses = [[1, 4], [2, 1], [9, 3], [0, 2]];

// The worst quarter of four equally likely rows is the third one alone.
const { total, rows } = await contributions(base, ["motor", "hull"], losses, measure);
assert.equal(total, 12);
assert.deepEqual(rows.map((row) => [row.id, row.value]), [["motor", 9], ["hull", 3]]);

// A refusal is typed too: it says where.
await assert.rejects(contributions(base, ["motor", "hull"], losses, { ...measure, level: 99.5 }), /level/);

console.log(`${caption(measure)}: ${total}, of which ${rows.map((row) => `${row.id} ${row.value}`).join(", ")}`);
