// Spares Bokeh work that a figure under the hand repeats in every frame and that changes nothing here. What is drawn stays the same.

let quickened = false;

/** Changes Bokeh's own classes before the first document is drawn. A part that is named differently in another Bokeh stays as it is. */
export function quickenDrawing(Bokeh) {
  if (quickened) return; // a restart draws again, with the same Bokeh
  quickened = true;
  quickenColours(Bokeh.require("core/visuals/visual")?.VisualProperties);
  quickenStyleSheets(Bokeh.require("core/dom")?.InlineStyleSheet);
  quickenPlots(Bokeh.require("models/plots/plot_canvas")?.PlotView);
  leavePlaces(Bokeh.require("models/renderers/renderer")?.RendererView);
  const { GlyphRendererView } = Bokeh.require("models/renderers/glyph_renderer") ?? {};
  clipOverlays(GlyphRendererView);
  restSpares(GlyphRendererView);
}

/**
 * For every colour and font of every figure Bokeh asks for custom properties "--bk-...", which no style sheet here sets, and each question
 * makes the browser work out its styles anew.
 */
function quickenColours(VisualProperties) {
  if (VisualProperties?.prototype._get_css_value) VisualProperties.prototype._get_css_value = () => "";
}

/** Each painted part writes its place into a style sheet of its own. One that stays where it was must not cost the styles of the page. */
function quickenStyleSheets(InlineStyleSheet) {
  const write = InlineStyleSheet?.prototype._update;
  if (!write) return;
  InlineStyleSheet.prototype._update = function (css) {
    if (this.el.textContent !== css) write.call(this, css);
  };
}

const waiting = new Set();

/**
 * Paints at once what waits for the browser's next frame. The answer of the worker comes at any time between two frames: painted then, it is
 * ready when the frame comes, instead of being begun then.
 */
export function paintWaiting() {
  for (const view of waiting) if (!view.is_destroyed) view.repaint();
  waiting.clear();
}

function quickenPlots(PlotView) {
  const fontSize = PlotView && Object.getOwnPropertyDescriptor(PlotView.prototype, "base_font_size");
  if (!fontSize) return;
  const known = new WeakMap();
  // Only sizes in em depend on it, and every text of our figures is in px.
  Object.defineProperty(PlotView.prototype, "base_font_size", {
    get() {
      if (!known.has(this)) known.set(this, fontSize.get.call(this));
      return known.get(this);
    },
  });
  const schedule = PlotView.prototype.schedule_paint;
  PlotView.prototype.schedule_paint = function () {
    waiting.add(this);
    schedule.call(this);
  };
  // The sizes of the axes follow from what lies on the first canvas; where only the overlay is painted anew, they need no measuring.
  const measure = PlotView.prototype._invalidate_layout_if_needed;
  PlotView.prototype._invalidate_layout_if_needed = function () {
    const above = !this._invalidate_all && [...this._invalidated_painters].every((view) => view.model.level === "overlay");
    if (!above) measure.call(this);
  };
  const paint = PlotView.prototype.paint;
  PlotView.prototype.paint = function () {
    waiting.delete(this);
    paint.call(this);
  };
}

/**
 * Each painted part also has an empty element, laid where the part is drawn. Of what moves with the hand it would move in every frame, and
 * each text painted after it would make the browser work out its styles anew.
 */
function leavePlaces(RendererView) {
  const place = RendererView?.prototype.update_position;
  if (!place) return;
  RendererView.prototype.update_position = function () {
    if (this.model.level !== "overlay") place.call(this);
  };
}

/** What moves with the hand is drawn on a figure's second canvas, "overlay", which Bokeh does not keep inside the frame by itself. */
function clipOverlays(GlyphRendererView) {
  if (!GlyphRendererView) return;
  Object.defineProperty(GlyphRendererView.prototype, "needs_clip", {
    get() {
      return this.model.level === "overlay";
    },
  });
}

const SPARES = ["decimated_glyph", "selection_glyph", "nonselection_glyph", "muted_glyph"];
const STEPS = ["set_data", "set_visuals", "after_visuals", "after_lazy_visuals", "map_data"];

/**
 * Bokeh keeps five copies of everything that is drawn from data: as it is, selected, not selected, muted and thinned out. What moves with
 * the hand is never selected, muted or thinned: its four spare copies stay as they were first made.
 */
function restSpares(GlyphRendererView) {
  const connect = GlyphRendererView?.prototype.connect_signals;
  if (!connect) return;
  GlyphRendererView.prototype.connect_signals = function () {
    connect.call(this);
    if (this.model.level !== "overlay") return;
    for (const spare of SPARES) for (const step of STEPS) if (this[spare]) this[spare][step] = () => {};
  };
}
