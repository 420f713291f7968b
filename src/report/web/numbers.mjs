// Whole numbers as spreadsheets of any country write them.

export const MOST = Number.MAX_SAFE_INTEGER;

const SPACES = /[\s\u00a0\u2007\u2009\u202f'’_]/g;
const PLAIN = /^\d+$/;

/** What "." and "," stand for in a column: "thousands", "decimals" or "unclear", each judged by all of the column's texts. */
export function columnStyle(texts) {
  return { ".": separatorStyle(texts, "."), ",": separatorStyle(texts, ",") };
}

// A separator splits thousands when every group after it has three digits: counts have no fractions. Where every single text
// ends in three zeros a program wrote decimals, as in 0.000, 1.000, 2.000; without a 0.000 these may be round thousands.
function separatorStyle(texts, mark) {
  if (!texts.some((text) => text.includes(mark))) return "thousands";
  let numbers = 0;
  let zeros = 0;
  for (const text of texts) {
    const at = text.indexOf(mark);
    numbers += 1;
    if (at < 0) continue;
    if (text.trimEnd().endsWith(`${mark}000`)) zeros += 1;
    const groups = text.replace(SPACES, "").split(mark);
    if (groups[0] === "0" || groups[0] === "") return "decimals";
    if (groups.slice(1).some((group) => !/^\d{3}([.,].*)?$/.test(group))) return "decimals";
  }
  return numbers > 1 && zeros === numbers ? "unclear" : "thousands";
}

/** The number a text stands for, or what is wrong with it: `{value, grouped}` or `{fault}`. */
export function readWhole(text, style) {
  if (PLAIN.test(text)) return bounded(Number(text), false);
  const bare = text.trim().replace(/^["“”]|["“”]$/g, "").replace(SPACES, "");
  if (bare === "") return { fault: "is empty" };
  if (/^[-−]\d/.test(bare)) return { fault: "is negative; degrees and nodes are counts from 0" };
  let digits = bare.replace(/^\+/, "");
  const grouped = digits !== text.trim();
  for (const mark of [".", ","]) {
    if (style[mark] === "unclear" && digits.includes(mark)) {
      return { fault: `can be read in two ways, as thousands or as decimals; write digits only` };
    }
    if (style[mark] === "thousands") digits = digits.split(mark).join("");
  }
  digits = digits.replace(/[.,]0*$/, "");
  if (/^\d+[.,]\d+$/.test(digits)) return { fault: "is not a whole number; counts have no fractions" };
  if (/^\d+([.,]\d+)?e\+?\d+$/i.test(digits)) return readExponent(digits);
  if (!PLAIN.test(digits)) return { fault: "is not a number; write digits only" };
  return bounded(Number(digits), grouped || digits !== bare);
}

function readExponent(digits) {
  const value = Number(digits.replace(",", "."));
  return Number.isInteger(value) ? bounded(value, false) : { fault: "is not a whole number; counts have no fractions" };
}

function bounded(value, grouped) {
  return value <= MOST ? { value, grouped } : { fault: `is larger than ${MOST}, the largest count that is read` };
}
