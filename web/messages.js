// Every message between page and worker, in one place. Both sides make messages with `message` and read them with `checked`.
// A field's type is what `typeof` says, or "file" (File), "map" (Map of ArrayBuffers), each with "?" where it may be null.

/** Page to worker. */
export const TO_WORKER = {
  boot: { address: "string", link: "string", theme: "string", touch: "boolean" }, // start Python; link: text after #, may be empty
  drawn: {}, // the document is on the page: changes may flow
  change: { serial: "number", patch: "string" }, // a Bokeh patch, JSON text
  command: { serial: "number", name: "string", payload: "object", file: "file?" }, // a typed command for the application
};

/** Worker to page. */
export const TO_PAGE = {
  stage: { name: "string", state: "string" }, // state: "begun" or "done"
  loaded: { bytes: "number", total: "number" }, // fetched so far, of all that the start fetches
  document: { json: "string", roots: "string" }, // the Bokeh document and which root goes in which slot, JSON texts
  patch: { patch: "string", buffers: "map" }, // a Bokeh patch, JSON text with binary parts beside it
  root: { id: "string", slot: "string" }, // the root of that id, about to arrive in a patch, goes in this slot
  done: { serial: "number", milliseconds: "number", patch: "string?", buffers: "map?" }, // a change or command was worked through; its last patch
  call: { name: "string", payload: "object" }, // the application asks the page for something
  trouble: { sentence: "string", support: "string" }, // an unexpected error; the application still runs
  failed: { sentence: "string", support: "string" }, // Python cannot start or has stopped
};

/** Commands of the page to the application: name and fields of the payload. `file` travels beside it. */
export const COMMANDS = {
  open_recording: { name: "string", bytes: "number" }, // with file
  open_case: { name: "string", bytes: "number" }, // with file
  drop_file: { name: "string", bytes: "number" }, // with file; the application tells a case from a recording
  save_case: {},
  copy_link: {},
  set_units: { pressure: "string" }, // "mmHg" or "kPa"
  set_link: { link: "string" }, // the text after # changed in the address line
  nudge: { right: "number", up: "number", large: "boolean" }, // arrow keys on the map, summed while the worker was busy
  undo: {},
  redo: {},
  show: { view: "string", open: "boolean" }, // "recording" or "handover" was opened or closed by the user
  theme: { theme: "string" }, // "light" or "dark"
  restarted: {}, // Python was started again after a failure
  stop_work: {}, // the user wants the long work under way to stop
  idle: {}, // nothing happened for a while: time to prepare what may be needed
};

/** What the application asks of the page. */
export const CALLS = {
  download: { name: "string", type: "string", data: "object" }, // data: Uint8Array
  set_hash: { link: "string" }, // writes the address line without a new history entry
  copy_link: { link: "string" }, // puts this page's address with # and link on the clipboard
  copy_text: { text: "string", what: "string" }, // what: named in the sentence afterwards, "The summary"
  keep_case: { link: "string" }, // remembered by the page for a restart, in memory only
  focus: { place: "string" }, // an element's id
  say: { place: "string", text: "string", tone: "string" }, // place: bar case map traces standing recording handover; tone: note refused
  standing: { text: "string", state: "string" }, // state: settles rings hunts none
  show: { view: "string", open: "boolean" },
  units: { pressure: "string" }, // shows which units are on
  progress: { title: "string", words: "string", share: "number" }, // of long work, share from 0 to 1; an empty title: it is over
  print: { html: "string" }, // prints a whole HTML page of its own
};

function fits(value, type) {
  const name = type.endsWith("?") ? type.slice(0, -1) : type;
  if (value === null || value === undefined) return type.endsWith("?");
  if (name === "file") return value instanceof Blob;
  if (name === "map") return value instanceof Map;
  return typeof value === name;
}

function checkFields(what, fields, spec) {
  for (const [field, type] of Object.entries(spec)) {
    if (!fits(fields[field], type)) throw new TypeError(`${what}: ${field} must be ${type}, got ${typeof fields[field]}`);
  }
}

/** A checked message of the given kind; throws TypeError if the kind is unknown or a field does not fit. */
export function message(direction, kind, fields = {}) {
  return checked(direction, { kind, ...fields });
}

/** The same message, if it fits its kind; throws TypeError otherwise. */
export function checked(direction, msg) {
  const spec = direction[msg?.kind];
  if (!spec) throw new TypeError(`unknown message ${msg?.kind}`);
  checkFields(msg.kind, msg, spec);
  if (msg.kind === "command" || msg.kind === "call") {
    const list = msg.kind === "command" ? COMMANDS : CALLS;
    if (!list[msg.name]) throw new TypeError(`unknown ${msg.kind} ${msg.name}`);
    checkFields(msg.name, msg.payload, list[msg.name]);
  }
  return msg;
}
