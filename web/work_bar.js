// The bar of long work: how far it is, in what it is, and the way to stop it. Work that ends at once never shows it.

const SHOW_AFTER_MS = 300;
const LEAST_MS = 500;

export class WorkBar {
  constructor(root) {
    this.root = root;
    this.underWay = false;
    this.shownAt = 0;
  }

  byId(id) {
    return this.root.getElementById(id);
  }

  get visible() {
    return !this.byId("work").hidden;
  }

  /** title: what is done, empty when it is over; words: what of it just now; share: done, from 0 to 1. */
  show({ title, words, share }) {
    if (title === "") {
      this.over();
      return;
    }
    if (!this.underWay) {
      this.underWay = true;
      clearTimeout(this.hideTimer);
      if (!this.visible) this.showTimer = setTimeout(() => this.reveal(), SHOW_AFTER_MS);
    }
    const percent = Math.floor(100 * share);
    this.byId("work-title").textContent = title;
    this.byId("work-words").textContent = words;
    this.byId("work-share").textContent = `${percent} %`;
    this.byId("work-fill").style.transform = `scaleX(${share})`;
    const bar = this.byId("work-bar");
    bar.setAttribute("aria-valuenow", String(percent));
    bar.setAttribute("aria-valuetext", `${percent} %, ${words}`);
    // A screen reader hears what is done once; how far it is can be asked of the bar at any time.
    if (this.visible && this.byId("work-live").textContent !== title) this.byId("work-live").textContent = title;
  }

  reveal() {
    this.byId("work").hidden = false;
    this.byId("work-live").textContent = this.byId("work-title").textContent;
    this.shownAt = performance.now();
  }

  /** The work has ended or was stopped: a bar that was just shown stays long enough to be seen. */
  over() {
    this.underWay = false;
    clearTimeout(this.showTimer);
    clearTimeout(this.hideTimer);
    if (!this.visible) return;
    this.hideTimer = setTimeout(() => this.hide(), Math.max(0, LEAST_MS - (performance.now() - this.shownAt)));
  }

  hide() {
    // The focus must not fall back to the top of the page with the button that had it.
    if (this.root.activeElement === this.byId("stop-work")) this.root.querySelector(".over:not([hidden])")?.focus();
    this.byId("work").hidden = true;
    this.byId("work-live").textContent = "";
  }
}
