// Makes examples/pictures/page.png, the page with the demo's forecast: `node tests/browser/picture.mjs`.

import { mkdir, stat } from "node:fs/promises";
import { fileURLToPath } from "node:url";
import { loadDemo, openPage, startBrowser, startService } from "./harness.mjs";

const PICTURE = fileURLToPath(new URL("../../examples/pictures/page.png", import.meta.url));

await mkdir(fileURLToPath(new URL("../../examples/pictures", import.meta.url)), { recursive: true });
const [browser, running] = await Promise.all([startBrowser(), startService()]);
try {
  const { page, close } = await openPage(browser, running.base, { width: 1040, height: 760 });
  await loadDemo(page);
  await page.evaluate(() => {
    document.activeElement.blur();
    scrollTo(0, 0);
  });
  await page.screenshot({ path: PICTURE, optimizeForSpeed: false });
  await close();
} finally {
  await browser.close();
  await running.stop();
}
console.log(`${PICTURE}: ${(await stat(PICTURE)).size} bytes`);
