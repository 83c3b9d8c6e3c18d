// Joins the Bokeh document on the page to the one in the worker. One message is under way at a time; the rest waits, newest wins.
import { TO_WORKER, message } from "./messages.js";
import { NewestWinsQueue } from "./queue.js";

// Events of a movement that say where things are now: an older one of the same model is of no use once a newer is there.
const REPLACEABLE = new Set(["pan", "mousemove", "pinch", "rotate", "rangesupdate", "lodstart", "lodend"]);

/** What the queue needs to know of a Bokeh document event. */
export function changeItem(event) {
  if (event.kind === "ModelChanged") {
    return { key: `property ${event.model.id} ${event.attr}`, value: event };
  }
  if (event.kind === "MessageSent" && event.msg_type === "bokeh_event") {
    const { event_name: name } = event.msg_data;
    const origin = event.msg_data.origin?.id ?? event.msg_data.model?.id ?? "";
    return { key: REPLACEABLE.has(name) ? `event ${origin} ${name}` : null, value: event };
  }
  return { key: null, value: event };
}

/** What the queue needs to know of a command. */
export function commandItem(name, payload, file = null) {
  const item = { command: true, key: null, value: { name, payload, file } };
  if (name === "nudge") {
    item.key = `nudge ${payload.large}`;
    item.merge = (older, newer) => ({
      ...newer,
      payload: { ...newer.payload, right: older.payload.right + newer.payload.right, up: older.payload.up + newer.payload.up },
    });
  } else if (name === "set_units" || name === "theme" || name === "set_link") {
    item.key = name;
  }
  return item;
}

// Binary values of the page are rare (files go another way): Python reads them as base64.
function plainValue(key, value) {
  const buffer = value instanceof ArrayBuffer ? value : value?.buffer instanceof ArrayBuffer ? value.buffer : null;
  if (!buffer) return value;
  let text = "";
  for (const byte of new Uint8Array(buffer)) text += String.fromCharCode(byte);
  return btoa(text);
}

export class DocumentLink {
  /**
   * post: sends a message to the worker. onBusy: told true when a message is sent, false when nothing is under way any more.
   * onLaid: called when a patch of the worker has been laid on the document.
   */
  constructor(post, onBusy = () => {}, onLaid = () => {}) {
    this.post = post;
    this.onBusy = onBusy;
    this.onLaid = onLaid;
    this.queue = new NewestWinsQueue();
    this.document = null;
    this.serial = 0;
    this.underWay = null;
    this.applying = 0;
    this.ready = false;
    this.lastMilliseconds = 0;
    this.sendingSoon = false;
  }

  /** Changes of this Bokeh document go to the worker from now on. */
  attach(document) {
    this.document = document;
    document.on_change((event) => {
      if (this.applying > 0 || event.sync === false) return;
      this.add(changeItem(event));
    }, false);
    this.ready = true;
    this.sendNext();
  }

  /** Sends a command of the page to the application, or lets it wait its turn. */
  command(name, payload = {}, file = null) {
    this.add(commandItem(name, payload, file));
  }

  /** What one event of the hand sets off, a moved dot and the event itself, goes in one message: it is sent when the event is over. */
  add(item) {
    this.queue.add(item);
    if (this.sendingSoon) return;
    this.sendingSoon = true;
    queueMicrotask(() => {
      this.sendingSoon = false;
      this.sendNext();
    });
  }

  /** A patch from the worker: laid on the page's document without being sent back. */
  apply(patch, buffers) {
    this.applying += 1;
    try {
      this.document.apply_json_patch(JSON.parse(patch), buffers);
    } finally {
      this.applying -= 1;
    }
    this.onLaid();
  }

  /** The worker has worked through a message: the next goes first, so that the worker calculates while the page draws the answer. */
  done(serial, milliseconds, patch = null, buffers = null) {
    const expected = serial === this.underWay;
    if (expected) {
      this.underWay = null;
      this.lastMilliseconds = milliseconds;
      this.sendNext();
    }
    if (patch !== null) this.apply(patch, buffers);
    if (expected && this.underWay === null) this.onBusy(false);
  }

  sendNext() {
    if (!this.ready || this.underWay !== null) return;
    const items = this.queue.takeRun((item) => !item.command);
    if (items.length === 0) return;
    this.serial += 1;
    this.underWay = this.serial;
    if (items[0].command) {
      const { name, payload, file } = items[0].value;
      this.post(message(TO_WORKER, "command", { serial: this.serial, name, payload, file }));
    } else {
      const patch = JSON.stringify(this.document.create_json_patch(items.map((item) => item.value)), plainValue);
      this.post(message(TO_WORKER, "change", { serial: this.serial, patch }));
    }
    this.onBusy(true);
  }
}
