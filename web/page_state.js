// What the frame shows: starting, ready, working, refused, failed, and the quiet lines. No knowledge of Python or Bokeh.
import { copyText } from "./clipboard.js";
import { WorkBar } from "./work_bar.js";

const STAGES = [
  ["runtime", "Python"],
  ["numbers", "numbers"],
  ["libraries", "drawing"],
  ["widgets", "controls"],
  ["application", "the loops"],
  ["page", "the page"],
];
const THINKING_AFTER_MS = 150;
const STUCK_AFTER_MS = 20000;
const LIVE_AFTER_MS = 700;
const NOTE_FOR_MS = 8000;

// Shape says the standing as well as colour: a level line, a dying ring, a steady wave.
const MARKS = {
  settles: "M1 14C4 2 6 3 8 9s4 1 11 1",
  rings: "M1 10C2 2 4 2 5 10s3 6 4 0 2.500-4 3.500 0 2 2.500 3 0 1.500-1 2.500 0",
  hunts: "M1 10C2.500 2 4 2 5.500 10s3 8 4.500 0 3-8 4.500 0 3 8 4.500 0",
};

export class PageState {
  constructor(root) {
    this.root = root;
    this.stages = new Map();
    this.readyCallbacks = [];
    this.supportText = "";
    this.workBar = new WorkBar(root);
    this.byId("dismiss").addEventListener("click", () => this.say("bar", "", "note"));
    this.byId("copy-support").addEventListener("click", (event) => this.copySupport(event.currentTarget));
  }

  byId(id) {
    return this.root.getElementById(id);
  }

  set(name) {
    this.root.body.dataset.state = name;
  }

  booting() {
    this.set("booting");
    this.byId("failed").hidden = true;
    this.byId("boot").hidden = false;
    this.byId("boot-bar").value = 0;
    this.workBar.over();
    this.busy(false);
    const list = this.byId("boot-stages");
    list.replaceChildren();
    this.stages.clear();
    this.stagesDone = 0;
    this.bytes = 0;
    this.total = 0;
    for (const [name, label] of STAGES) {
      const item = this.root.createElement("li");
      item.textContent = label;
      item.dataset.state = "waiting";
      list.append(item);
      this.stages.set(name, item);
    }
  }

  /** A stage began or was done. It only ever goes forward: waiting, begun, done. */
  stage(name, state) {
    const item = this.stages.get(name);
    if (!item || item.dataset.state === "done") return;
    item.dataset.state = state;
    const done = [...this.stages.values()].filter((each) => each.dataset.state === "done").length;
    this.stagesDone = done;
    this.showProgress();
  }

  loaded(bytes, total) {
    this.bytes = bytes;
    this.total = total;
    this.showProgress();
  }

  // Half of the bar is bytes, half is stages: neither alone says how far the start is.
  showProgress() {
    const part = this.total ? this.bytes / this.total : 0;
    this.byId("boot-bar").value = 0.5 * part + (0.5 * this.stagesDone) / STAGES.length;
    const of = this.total ? `, ${(this.bytes / 1e6).toFixed(1)} of ${(this.total / 1e6).toFixed(1)} MB` : "";
    this.byId("boot-title").textContent = `Starting: step ${Math.min(this.stagesDone + 1, STAGES.length)} of ${STAGES.length}${of}`;
  }

  ready() {
    this.set("ready");
    this.byId("boot").hidden = true;
    for (const callback of this.readyCallbacks.splice(0)) callback();
  }

  whenReady(callback) {
    this.readyCallbacks.push(callback);
  }

  /** Working: a small mark after 150 ms, and a way out after 20 s. */
  busy(on) {
    clearTimeout(this.thinkingTimer);
    clearTimeout(this.stuckTimer);
    if (on) {
      this.thinkingTimer = setTimeout(() => this.reveal("thinking", true), THINKING_AFTER_MS);
      this.stuckTimer = setTimeout(() => this.reveal("stuck", true), STUCK_AFTER_MS);
    } else {
      this.reveal("thinking", false);
      this.reveal("stuck", false);
    }
  }

  reveal(id, on) {
    this.byId(id).hidden = !on;
  }

  standing(text, standing) {
    const place = this.byId("standing");
    this.byId("standing-text").textContent = text;
    if (place.dataset.standing !== standing) {
      place.dataset.standing = standing;
      const mark = this.byId("standing-mark");
      mark.replaceChildren();
      if (MARKS[standing]) {
        const path = this.root.createElementNS("http://www.w3.org/2000/svg", "path");
        path.setAttribute("d", MARKS[standing]);
        mark.append(path);
      }
    }
    // A screen reader hears the sentence when the hand has stopped, not each one on the way.
    clearTimeout(this.liveTimer);
    this.liveTimer = setTimeout(() => {
      this.byId("standing-live").textContent = text;
    }, LIVE_AFTER_MS);
  }

  say(place, text, tone) {
    const element = this.byId(`said-${place}`);
    element.textContent = text;
    element.dataset.tone = tone;
    element.hidden = text === "";
    if (place !== "bar") return;
    this.byId("slip").hidden = text === "";
    this.byId("slip").dataset.tone = tone;
    clearTimeout(this.slipTimer);
    // What was done needs no keeping; what was refused stays until it is put away.
    if (tone === "note") this.slipTimer = setTimeout(() => this.say("bar", "", "note"), NOTE_FOR_MS);
  }

  line(name, on) {
    this.byId(`${name}-line`).hidden = !on;
  }

  /** Something unexpected that the application survived. */
  trouble(sentence, support) {
    this.supportText = support;
    this.say("bar", `the last step failed unexpectedly: ${sentence} `, "refused");
    const button = this.root.createElement("button");
    button.type = "button";
    button.textContent = "Copy the lines for support";
    button.addEventListener("click", () => this.copySupport(button));
    this.byId("said-bar").append(button);
  }

  failed(sentence, support) {
    this.set("failed");
    this.workBar.over();
    this.busy(false);
    this.supportText = support;
    this.byId("boot").hidden = true;
    this.byId("failed").hidden = false;
    this.byId("failed-sentence").textContent = sentence;
    this.byId("failed-support").textContent = support;
    this.byId("restart").focus();
  }

  onRestart(callback) {
    for (const id of ["restart", "stop"]) this.byId(id).addEventListener("click", callback);
  }

  async copySupport(button) {
    const copied = await copyText(this.supportText);
    button.textContent = copied ? "Copied" : "The browser does not allow copying here";
  }

  /** Opens or closes a view over the middle; focus goes in and comes back. */
  show(view, open) {
    const element = this.byId(`over-${view}`);
    if (element.hidden === !open) return;
    if (open) {
      for (const other of this.root.querySelectorAll(".over")) other.hidden = true;
      this.focusBefore = this.root.activeElement;
      element.hidden = false;
      element.focus();
    } else {
      element.hidden = true;
      this.focusBefore?.focus?.();
    }
    this.root.body.dataset.view = open ? view : "";
  }
}
