// The page: draws the frame's states, starts the worker, and joins buttons, files, keys and the address line to the application.
import { TO_PAGE, TO_WORKER, checked, message } from "./messages.js";
import { DocumentLink } from "./link.js";
import { PageState } from "./page_state.js";
import { answerCall } from "./calls.js";
import { paintWaiting, quickenDrawing } from "./drawing.js";
import { loadScripts } from "./scripts.js";
import { startInput } from "./input.js";
import { startOffline } from "./offline.js";
import { site } from "./site.js";
import { shareTouches, startTouch } from "./touch.js";

const SLOTS = ["case", "map", "traces", "standing", "recording", "handover"];
const IDLE_AFTER_MS = 4000;

const state = new PageState(document);
const library = new URL(site.library, import.meta.url).href;
const scripts = loadScripts(site.scripts.map((name) => library + name));
const page = { link: null, worker: null, keptCase: null, roots: [], state };
const darkPreferred = matchMedia("(prefers-color-scheme: dark)");

const theme = () => (darkPreferred.matches ? "dark" : "light");
const post = (msg) => page.worker?.postMessage(msg);

/** Starts a worker under this page's own content security policy: a worker made from a blob inherits it, on any server. */
function makeWorker() {
  const source = `import ${JSON.stringify(new URL("worker.js", import.meta.url).href)};`;
  const address = URL.createObjectURL(new Blob([source], { type: "text/javascript" }));
  const worker = new Worker(address, { type: "module" });
  worker.addEventListener("message", () => URL.revokeObjectURL(address), { once: true });
  return worker;
}

function slotElement(slot) {
  return document.getElementById(`slot-${slot}`);
}

async function draw({ json, roots }) {
  await scripts;
  quickenDrawing(window.Bokeh);
  shareTouches(window.Bokeh);
  const { Document } = window.Bokeh.require("document/document");
  const rootSlots = JSON.parse(roots);
  const jsdoc = Document.from_json(JSON.parse(json));
  // Bokeh looks a root's element up by its index, also for roots that come later: the list is kept and grows.
  page.roots = jsdoc.roots().map((root) => slotElement(rootSlots[root.id]));
  for (const element of page.roots) element.replaceChildren();
  page.views = await window.Bokeh.embed.add_document_standalone(jsdoc, document.body, page.roots);
  page.link.attach(jsdoc);
  post(message(TO_WORKER, "drawn"));
  state.ready();
}

const handlers = {
  stage: (msg) => state.stage(msg.name, msg.state),
  loaded: (msg) => state.loaded(msg.bytes, msg.total),
  document: (msg) => draw(msg).catch((error) => fail("The page could not be drawn.", String(error.stack ?? error))),
  patch: (msg) => page.link.apply(msg.patch, msg.buffers),
  root: (msg) => {
    const element = slotElement(msg.slot);
    element.replaceChildren();
    page.roots.push(element);
  },
  done: (msg) => page.link.done(msg.serial, msg.milliseconds, msg.patch, msg.buffers),
  call: (msg) => answerCall(page, msg.name, msg.payload),
  trouble: (msg) => state.trouble(msg.sentence, msg.support),
  failed: (msg) => fail(msg.sentence, msg.support),
};

function fail(sentence, support) {
  page.worker?.terminate();
  page.worker = null;
  state.failed(sentence, `Lagscape ${site.version} · ${support}`);
}

/** Starts Python with the case in `link`; also used to start again. */
function boot(link, again = false) {
  state.booting();
  page.worker?.terminate();
  page.link = new DocumentLink(post, (busy) => state.busy(busy), paintSoon);
  const worker = makeWorker();
  page.worker = worker;
  worker.onmessage = (event) => {
    if (worker !== page.worker) return;
    const msg = checked(TO_PAGE, event.data);
    handlers[msg.kind](msg);
  };
  worker.onerror = (event) => {
    event.preventDefault();
    if (worker === page.worker) fail("The calculation stopped and cannot go on.", `${event.message ?? "worker error"}`);
  };
  const touch = matchMedia("(pointer: coarse)").matches;
  const address = location.href.split("#")[0];
  post(message(TO_WORKER, "boot", { address, link, theme: theme(), touch }));
  if (again) page.link.command("restarted");
}

// In a task of its own: what Bokeh does with new data goes on for some steps after the patch.
const { port1: whenLaid, port2: laid } = new MessageChannel();
whenLaid.onmessage = paintWaiting;
const paintSoon = () => laid.postMessage(null);

const linkInAddress = () => location.hash.slice(1);
const restart = () => {
  page.views?.clear?.();
  for (const slot of SLOTS) slotElement(slot).replaceChildren();
  boot(page.keptCase ?? linkInAddress(), true);
};

/** Calls back once, when neither pointer nor key has moved for a while. */
function whenIdle(callback) {
  const events = ["pointermove", "pointerdown", "keydown", "wheel"];
  let timer = 0;
  const wait = () => {
    clearTimeout(timer);
    timer = setTimeout(() => {
      for (const name of events) window.removeEventListener(name, wait);
      callback();
    }, IDLE_AFTER_MS);
  };
  for (const name of events) window.addEventListener(name, wait, { passive: true });
  wait();
}

state.onRestart(restart);
startInput(page);
startTouch(page);
window.addEventListener("hashchange", () => page.link.command("set_link", { link: linkInAddress() }));
darkPreferred.addEventListener("change", () => page.link.command("theme", { theme: theme() }));

const offline = startOffline((line, on) => state.line(line, on));
document.getElementById("use-version").addEventListener("click", () => {
  if (page.keptCase) history.replaceState(null, "", `#${page.keptCase}`);
  offline.useNewVersion();
});

boot(linkInAddress());
// The second copy of every file, for use without a network, must not compete with the start.
state.whenReady(() => {
  const later = window.requestIdleCallback ?? ((work) => setTimeout(work, 1000));
  later(() => offline.register());
  whenIdle(() => page.link.command("idle"));
});

// For tests and benchmarks: what the page knows, read only by them.
window.lagscape = { page, version: site.version };
