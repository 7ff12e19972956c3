// What a laboratory's system written in TypeScript does with the generated types: freeze limits, watch, assess,
// meet a problem. `node client.js URL MEASUREMENTS` prints what was read, and the answers.

import { readFileSync } from "node:fs";
import createClient from "openapi-fetch";
import type { components, paths } from "./contract.js";

type Schemas = components["schemas"];

interface Measured {
  baseline: Schemas["SubgroupData"];
  first: Schemas["SubgroupData"];
  second: Schemas["SubgroupData"];
  specification: Schemas["SpecificationRequest"];
}

const [, , url = "", file = ""] = process.argv;
const measured = JSON.parse(readFileSync(file, "utf8")) as Measured;
const client = createClient<paths>({ baseUrl: url });
const characteristic = { name: "wall thickness", unit: "mm" };

/** The answer, where there is one; a problem ends the program with its sentences. */
function good<Answer>(result: { data?: Answer; error?: Schemas["Problem"] }): Answer {
  if (result.data === undefined) throw new Error(`${result.error?.title} ${result.error?.detail}`);
  return result.data;
}

const fitted = good(
  await client.POST("/v1/charts/xbar-r/limits", { body: { characteristic, data: measured.baseline } }),
);
// Kept beside the characteristic as JSON, and taken from there for every judgement.
const kept = JSON.stringify(fitted.limits);

const judged: Schemas["XbarRSignalsAnswer"][] = [];
let carry: Schemas["XbarRCarry"] | null = null;
for (const data of [measured.first, measured.second]) {
  const limits = JSON.parse(kept) as Schemas["XbarRLimits"];
  const answer: Schemas["XbarRSignalsAnswer"] = good(
    await client.POST("/v1/charts/xbar-r/signals", { body: { limits, data, carry } }),
  );
  carry = answer.carry;
  judged.push(answer);
}

const capability = good(
  await client.POST("/v1/capability/measurements", {
    body: {
      characteristic,
      data: { values: measured.baseline.values ?? [] },
      specification: measured.specification,
    },
  }),
);

const { error: problem } = await client.POST("/v1/charts/xbar-r/limits", {
  body: { data: measured.baseline, sigma_multiple: -3 },
});
if (problem === undefined) throw new Error("a problem was expected");

const picture: string = good(
  await client.POST("/v1/charts/xbar-r/limits/picture", {
    body: { characteristic, data: measured.baseline },
    parseAs: "text",
  }),
);

console.log(
  JSON.stringify({
    read: {
      centre: fitted.limits.centre,
      mean_upper: fitted.limits.panels.mean.upper,
      range_lower: fitted.limits.panels.range.lower,
      verdicts: judged.map((answer) => answer.verdict),
      signals: judged.flatMap((answer) =>
        answer.signals.map((one) => [one.rule, one.panel, one.id, one.side, one.sentence]),
      ),
      points_behind: judged.at(-1)?.carry.points,
      cpk: capability.capability?.cpk?.value,
      pointer: problem.errors?.[0]?.pointer,
      code: problem.errors?.[0]?.code,
    },
    fitted,
    judged,
    capability,
    problem,
    picture,
  }),
);
