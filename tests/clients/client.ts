// A client as a web application would write it, on types generated from the OpenAPI document alone:
//
//   npx openapi-typescript http://127.0.0.1:8000/openapi.json -o schema.d.ts --default-non-nullable false
import createClient from "openapi-fetch";
import type { components, paths } from "./schema.js";

type Json = "application/json" | "application/problem+json"; // the tables (text/csv and so on) are not read here
type Measure = components["schemas"]["Measure"];

export interface Contribution {
  id: string;
  value: number;
  standardError: number | null;
}

/** The words a screen would show for a measure; the compiler knows the parameters of each kind. */
export function caption(measure: Measure): string {
  switch (measure.kind) {
    case "value_at_risk":
    case "expected_shortfall":
      return `${measure.kind} at ${measure.level}`;
    case "range_value_at_risk":
      return `${measure.kind} from ${measure.lower_level} to ${measure.upper_level}`;
    default:
      return measure.kind;
  }
}

/** Total and Euler contributions of one measure over a table of losses, one row a scenario. */
export async function contributions(
  baseUrl: string,
  ids: string[],
  values: number[][],
  measure: Measure,
): Promise<{ total: number; rows: Contribution[] }> {
  const client = createClient<paths, Json>({ baseUrl });
  const { data, error } = await client.POST("/v1/allocations", {
    body: {
      losses: { kind: "scenarios", sub_portfolios: ids.map((id) => ({ id })), values },
      measures: [measure],
    },
  });
  if (error) {
    throw new Error(`${error.title}: ${error.errors.map((e) => `${e.pointer ?? ""} ${e.detail}`).join("; ")}`);
  }
  const [allocation] = data.allocations;
  if (!allocation) {
    throw new Error("one measure was asked for and none came back");
  }
  return {
    total: allocation.total.value,
    rows: allocation.sub_portfolios.map((row) => ({
      id: row.id,
      value: row.contribution.value,
      standardError: row.contribution.standard_error ?? null,
    })),
  };
}
