// The worker: fetches the runtime and the bundles, boots Python in named stages, then hands messages to and fro.
// Nothing here knows what the application is about; Python's side of the boundary is lagscape.app.boot.
import { TO_PAGE, TO_WORKER, checked, message } from "./messages.js";
import { countedFetch } from "./worker_fetch.js";
import { loadScipy } from "./worker_scipy.js";
import { unpack } from "./worker_unpack.js";
import { site } from "./site.js";

const SITE_PACKAGES = "/lib/python3.12/site-packages";
const library = new URL(site.library, import.meta.url).href;
const here = new URL("./", import.meta.url).href;

let pyodide = null;
let application = null;
let scipyLoading = null;
let scipyFetched = 0; // which share of it has arrived
let working = false;
let lastPatch = null;
let lastStanding = null;

function post(kind, fields, transfer = []) {
  sendLastPatch();
  self.postMessage(message(TO_PAGE, kind, fields), transfer);
}

/** The last patch of a message goes with the word that it is done, one message instead of two; an earlier one goes before what follows it. */
function sendLastPatch() {
  if (lastPatch === null) return;
  const { patch, buffers } = lastPatch;
  lastPatch = null;
  self.postMessage(message(TO_PAGE, "patch", { patch, buffers }), [...buffers.values()]);
}

function postDone(serial, milliseconds) {
  const { patch, buffers } = lastPatch ?? { patch: null, buffers: null };
  lastPatch = null;
  // The word and the picture it belongs to leave together, so that one frame shows both.
  if (lastStanding !== null) post("call", { name: "standing", payload: lastStanding });
  lastStanding = null;
  self.postMessage(message(TO_PAGE, "done", { serial, milliseconds, patch, buffers }), buffers ? [...buffers.values()] : []);
}

/** The last line of a Python traceback is the sentence; the rest helps support. */
function describe(error) {
  const text = String(error?.message ?? error);
  const lines = text.trim().split("\n");
  return { sentence: lines[lines.length - 1].slice(0, 400), support: text.slice(-3000) };
}

async function stage(name, work) {
  post("stage", { name, state: "begun" });
  const result = await work();
  post("stage", { name, state: "done" });
  return result;
}

// What Python may call. Values go in and come out; nothing is built from text.
const host = {
  call(name, payloadJson, data) {
    const payload = JSON.parse(payloadJson);
    if (working && name === "standing") {
      lastStanding = payload;
      return;
    }
    if (data) payload.data = data;
    post("call", { name, payload }, data ? [data.buffer] : []);
  },
  patch(patch, names, parts) {
    sendLastPatch();
    lastPatch = { patch, buffers: new Map(names.map((name, i) => [name, parts[i]])) };
    if (!working) sendLastPatch();
  },
  root(id, slot) {
    post("root", { id, slot });
  },
  trouble(sentence, support) {
    post("trouble", { sentence, support });
  },
  loadScipy() {
    const fetched = (share) => {
      scipyFetched = share;
    };
    scipyLoading ??= loadScipy(pyodide, library, site.scipyBytes, fetched).catch((error) => {
      scipyLoading = null; // the next one who asks tries again
      throw error;
    });
    return scipyLoading;
  },
  scipyFetched() {
    return scipyFetched;
  },
  // Reads part of a file the user opened; only a worker may read it in step with Python.
  readSlice(file, begin, end) {
    return new Uint8Array(new FileReaderSync().readAsArrayBuffer(file.slice(begin, end)));
  },
  now() {
    return performance.now();
  },
};

async function boot({ address, link, theme, touch }) {
  const report = (bytes, total) => post("loaded", { bytes, total });
  const counted = countedFetch(self.fetch.bind(self), site.sizes, report);
  // The runtime fetches its own core: it gets the counting fetch, so that its bytes are shown too.
  self.fetch = counted;
  const bundle = (folder, name) => counted(folder + name).then((answer) => answer.arrayBuffer());
  const bundles = {
    numpy: bundle(library, "numpy.zip"),
    libraries: bundle(library, "libraries.zip"),
    lagscape: bundle(here, "lagscape.zip"),
  };
  // A bundle that fails is reported where it is waited for.
  for (const promise of Object.values(bundles)) promise.catch(() => {});

  await stage("runtime", async () => {
    const { loadPyodide } = await import(`${library}pyodide.mjs`);
    pyodide = await loadPyodide({ indexURL: library, stdLibURL: `${library}python_stdlib.zip`, lockFileURL: `${library}pyodide-lock.json` });
    counted.tell("pyodide.asm.wasm");
  });
  await stage("numbers", async () => {
    unpack(pyodide.FS, await bundles.numpy, SITE_PACKAGES);
    pyodide.runPython("import importlib; importlib.invalidate_caches(); import numpy");
  });
  await stage("libraries", async () => {
    unpack(pyodide.FS, await bundles.libraries, SITE_PACKAGES);
    unpack(pyodide.FS, await bundles.lagscape, SITE_PACKAGES);
    counted.tell();
    pyodide.runPython("importlib.invalidate_caches()");
    application = pyodide.pyimport("lagscape.app.boot");
    application.prepare(`${library}panel/dist/`);
    application.import_drawing();
  });
  await stage("widgets", () => application.import_widgets());
  await stage("application", () => application.import_application());
  await stage("page", () => {
    const settings = JSON.stringify({ address, link, theme, touch });
    const [json, roots] = JSON.parse(application.build(host, settings));
    post("document", { json, roots });
  });
}

function handle(msg) {
  const begun = performance.now();
  working = msg.serial !== undefined;
  try {
    if (msg.kind === "drawn") application.drawn();
    else if (msg.kind === "change") application.change(msg.patch);
    else if (msg.kind === "command") application.command(msg.name, JSON.stringify(msg.payload), msg.file ?? null);
  } catch (error) {
    // Python code reports its own errors; what arrives here has broken the runtime itself.
    post("failed", { ...describe(error), sentence: "The calculation stopped and cannot go on." });
    return;
  } finally {
    working = false;
  }
  if (msg.serial !== undefined) postDone(msg.serial, performance.now() - begun);
}

self.onmessage = (event) => {
  const msg = checked(TO_WORKER, event.data);
  if (msg.kind !== "boot") {
    handle(msg);
    return;
  }
  boot(msg).catch((error) => {
    const { sentence, support } = describe(error);
    post("failed", { sentence: `Lagscape could not start: ${sentence}`, support });
  });
};
