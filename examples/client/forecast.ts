// Asks for a forecast through a client generated from the OpenAPI document, prints it, and reads it back.
import createClient from "openapi-fetch";
import type { paths } from "./built/tailcast.js";

const service = process.argv[2] ?? "http://127.0.0.1:8080";
const client = createClient<paths, "application/json" | "application/problem+json">({ baseUrl: service });

const { data: run, error, response } = await client.POST("/v1/forecasts", {
  body: {
    label: "heronsgate, followers",
    degree_kind: "received",
    snapshots: [
      {
        as_of: "2026-06-01",
        degree_counts: [
          [0, 5400], [1, 1075], [2, 416], [3, 209], [4, 120], [5, 76], [6, 52], [7, 37], [8, 27],
          [9, 21], [10, 17], [12, 24], [15, 18], [20, 13], [30, 8], [45, 3], [70, 1],
        ],
      },
    ],
    arrivals: { per_day: 42 },
    thresholds: [5, 10, 50],
    horizon: { until: "2027-06-01", every: "P3M" },
    limits: [{ name: "fan-out shards", threshold: 50, max_nodes: 12, by: "2027-06-01", risk: 0.05 }],
  },
});
if (error) {
  // Every fault comes with its place in the body.
  console.error(error.detail, error.errors ?? []);
  process.exit(1);
}

for (const { date, tail } of run.forecast) {
  for (const { threshold, now, expected, intervals } of tail) {
    const widest = intervals.at(-1);
    console.log(`${date}  ${threshold}+ links: ${now} now, ${expected.toFixed(1)} expected, ${widest?.low} to ${widest?.high}`);
  }
}
for (const { name, by, at_by } of run.limits) {
  console.log(`${name}: full by ${by} with probability ${at_by.crossed.toFixed(3)}`);
}
console.log(run.cautions.join(" "));

const location = response.headers.get("location");
const again = await client.GET("/v1/forecasts/{id}", { params: { path: { id: run.id } } });
if (location !== `/v1/forecasts/${run.id}` || again.data?.inputs_digest !== run.inputs_digest) {
  console.error("the run is not kept where it was said to be");
  process.exit(1);
}
