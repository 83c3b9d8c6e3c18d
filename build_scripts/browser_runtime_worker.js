// Runs Python inside the built site's own runtime, for tests and the benchmark: the files that the page boots from, in a worker of
// the same origin, without the page. Messages: start, files (zip bundles for the runtime's disk), run; each is answered once.

const SITE_PACKAGES = "/lib/python3.12/site-packages";

let pyodide = null;
let unpack = null;
let loadScipy = null;
let library = null;
const times = {};

const bytesOf = (address) => fetch(address).then((answer) => {
  if (!answer.ok) throw new Error(`${address} could not be fetched (status ${answer.status})`);
  return answer.arrayBuffer();
});

const tasks = {
  /** Boots the runtime with numpy as the page does; bare: nothing of ours, for comparing boot times. */
  async start({ app, bare }) {
    const { site } = await import(`${app}site.js`);
    ({ unpack } = await import(`${app}worker_unpack.js`));
    ({ loadScipy } = await import(`${app}worker_scipy.js`));
    library = new URL(site.library, app).href;
    const begun = performance.now();
    const numpy = bytesOf(`${library}numpy.zip`);
    const { loadPyodide } = await import(`${library}pyodide.mjs`);
    pyodide = await loadPyodide({ indexURL: library, stdLibURL: `${library}python_stdlib.zip`, lockFileURL: `${library}pyodide-lock.json` });
    unpack(pyodide.FS, await numpy, SITE_PACKAGES);
    pyodide.runPython("import importlib; importlib.invalidate_caches(); import numpy");
    times.bareBootMs = performance.now() - begun;
    if (bare) return times;
    unpack(pyodide.FS, await bytesOf(`${library}libraries.zip`), SITE_PACKAGES);
    unpack(pyodide.FS, await bytesOf(`${app}lagscape.zip`), SITE_PACKAGES);
    pyodide.runPython("importlib.invalidate_caches()");
    return times;
  },
  /** Lays the files of a zip on the runtime's disk. */
  async files({ address, folder }) {
    unpack(pyodide.FS, await bytesOf(address), folder);
    pyodide.runPython("importlib.invalidate_caches()");
    return null;
  },
  async path({ folder }) {
    pyodide.pyimport("sys").path.insert(0, folder);
    return null;
  },
  async scipy() {
    await loadScipy(pyodide, library);
    return null;
  },
  /** Calls a function of an importable module with JSON values; its result must be JSON values too. */
  async run({ module, name, values }) {
    const call = pyodide.runPython(`
import importlib, json
def _call(module, name, values):
    return json.dumps(getattr(importlib.import_module(module), name)(**json.loads(values)))
_call`);
    try {
      return JSON.parse(call(module, name, JSON.stringify(values)));
    } finally {
      call.destroy();
    }
  },
};

self.onmessage = async (event) => {
  const { serial, task, fields } = event.data;
  try {
    self.postMessage({ serial, result: await tasks[task](fields) });
  } catch (error) {
    self.postMessage({ serial, trouble: String(error?.message ?? error).slice(-4000) });
  }
};
