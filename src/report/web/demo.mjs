// Heronsgate, an invented social network: what a first-time visitor can load.

import { call } from "./http.mjs";

/** Degree counts of Heronsgate on its day, and questions about it. */
export async function demo() {
  const { data } = await call("/assets/heronsgate.csv");
  return {
    text: data,
    entered: {
      kind: "received",
      asOf: "2026-08-01",
      arrivals: "40",
      growth: "",
      links: "",
      thresholds: "5, 10, 20, 50",
      until: "2027-08-01",
      every: "P1M",
      limits: [{ name: "delivery pools", threshold: "50", max_nodes: "160", by: "2027-06-01", risk: "5" }],
      scenarios: [
        { name: "campaign", arrivals_factor: "25" },
        { name: "followers capped", degree_cap: "60" },
      ],
    },
  };
}
