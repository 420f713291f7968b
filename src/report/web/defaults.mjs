// What is asked when the visitor has not said.

/** Nodes at or past the largest threshold offered: fewer say little about how many there will be. */
const FEWEST_HUBS = 5;
/** Share of nodes past the smallest threshold offered: more are no hubs. */
const WIDEST_TAIL = 0.2;
const MOST_THRESHOLDS = 5;

/** Sums of a snapshot: nodes, link ends, distinct degrees, the largest degree of any node. */
export function totals(counts) {
  let nodes = 0;
  let ends = 0;
  let largest = 0;
  for (const [degree, number] of counts) {
    nodes += number;
    ends += degree * number;
    if (number > 0 && degree > largest) largest = degree;
  }
  return { nodes, ends, degrees: counts.length, largest };
}

/** Nodes with at least `threshold` links. */
export function tailSize(counts, threshold) {
  return counts.reduce((sum, [degree, nodes]) => (degree >= threshold ? sum + nodes : sum), 0);
}

/** Round thresholds (1, 2, 5 and their tenfolds) past which there are hubs, but not too few of them. */
export function pickThresholds(counts) {
  const { nodes, largest } = totals(counts);
  const round = [];
  for (let ten = 1; ten <= largest; ten *= 10) round.push(ten, 2 * ten, 5 * ten);
  const fit = round.filter((threshold) => {
    const size = tailSize(counts, threshold);
    return size >= FEWEST_HUBS && size <= WIDEST_TAIL * nodes;
  });
  return fit.length > 0 ? fit.slice(-MOST_THRESHOLDS) : [Math.max(1, largest)];
}

/** The threshold to speak of first: the largest that is past by 50 nodes, whose future is less a matter of chance. */
export function pickShown(thresholds, sizeOf) {
  const many = thresholds.filter((threshold) => sizeOf(threshold) >= 50);
  return many.length > 0 ? Math.max(...many) : Math.min(...thresholds);
}

/** Today by the visitor's own calendar, as in 2026-06-01. */
export function today(now = new Date()) {
  const two = (n) => String(n).padStart(2, "0");
  return `${now.getFullYear()}-${two(now.getMonth() + 1)}-${two(now.getDate())}`;
}

/** The same day a year on; the last of February after a 29th. */
export function yearAfter(date) {
  const [year, month, day] = date.split("-");
  const leap = month === "02" && day === "29" ? "28" : day;
  return `${String(Number(year) + 1).padStart(4, "0")}-${month}-${leap}`;
}
