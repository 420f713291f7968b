// The same answer from a shell.

import { accessKey } from "./key.mjs";

/** Longest body that is put on the command line: Linux takes 128 KiB an argument. */
const LONGEST_ARGUMENT = 100_000;

/** Name of the file that holds a body too long for the command line. */
export const REQUEST_FILE = "tailcast-request.json";

/** A curl line that makes the same call; `inFile` says that its body must be in REQUEST_FILE. */
export function curlLine(origin, { method, path, body }) {
  const address = shellQuoted(origin + path);
  // The key itself has no place in a line that is passed on.
  const key = accessKey() ? ' -H "Authorization: Bearer $TAILCAST_ACCESS_KEY"' : "";
  if (method === "GET") return { line: `curl -s ${address}${key}`, inFile: false };
  const head = `curl -s ${method === "POST" ? "" : `-X ${method} `}${address}${key} -H 'Content-Type: application/json'`;
  const inFile = new TextEncoder().encode(body).length > LONGEST_ARGUMENT;
  return { line: `${head} --data-binary ${inFile ? `@${REQUEST_FILE}` : shellQuoted(body)}`, inFile };
}

/** A text as one word of a POSIX shell. */
export function shellQuoted(text) {
  return `'${text.replaceAll("'", "'\\''")}'`;
}
