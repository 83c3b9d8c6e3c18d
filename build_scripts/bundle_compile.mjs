// Compiles Python sources to the runtime's own byte-code, by running that runtime under Node.
// Arguments: runtime folder, lock file, folder to mount, jobs file inside it. A job is [source, target, name in tracebacks].
import { pathToFileURL } from "node:url";
import path from "node:path";

const [runtimeFolder, lockFile, mounted, jobsName] = process.argv.slice(2);
// The runtime's whole source would be printed with an uncaught error: say the message alone.
process.on("uncaughtException", (error) => {
  process.stderr.write(`${String(error.message).slice(-1500)}\n`);
  process.exit(1);
});
const { loadPyodide } = await import(pathToFileURL(path.join(runtimeFolder, "pyodide.mjs")));
const pyodide = await loadPyodide({ indexURL: `${runtimeFolder}/`, lockFileURL: lockFile });
pyodide.mountNodeFS("/mounted", mounted);
pyodide.globals.set("jobs_path", `/mounted/${jobsName}`);
pyodide.runPython(`
import json, os, py_compile
with open(jobs_path) as file:
    jobs = json.load(file)
for number, (source, target, shown) in enumerate(jobs, start=1):
    try:
        py_compile.compile(f"/mounted/{source}", f"/mounted/{target}", dfile=shown, doraise=True,
                           invalidation_mode=py_compile.PycInvalidationMode.UNCHECKED_HASH)
    except py_compile.PyCompileError as error:
        raise ValueError(f"{shown}: {error.exc_value}") from None
    if number % 100 == 0 or number == len(jobs):
        print(number, flush=True)
`);
