// Runs a program under MicroPython: reads {"files": {path: text}, "program": text} as JSON from standard input.
// What the program prints goes to standard output; a traceback ends in exit status 1.

import { readFileSync } from "node:fs";
import { loadMicroPython } from "@micropython/micropython-webassembly-pyscript/micropython.mjs";

const asked = JSON.parse(readFileSync(0, "utf8"));
const micropython = await loadMicroPython({
  heapsize: 32 * 1024 * 1024,
  linebuffer: true,
  stdout: (line) => process.stdout.write(line + "\n"),
});
for (const [path, text] of Object.entries(asked.files)) {
  let folder = "";
  for (const part of path.split("/").slice(1, -1)) {
    folder += "/" + part;
    if (!micropython.FS.analyzePath(folder).exists) micropython.FS.mkdir(folder);
  }
  micropython.FS.writeFile(path, text);
}
try {
  micropython.runPython(asked.program);
} catch (error) {
  process.stderr.write(String(error) + "\n");
  process.exitCode = 1;
}
