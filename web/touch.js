// What a finger does on a drawing: near the dot it drags the dot, along a strip of time it moves that; anything else scrolls the page.
// Left alone, the browser takes every touch for a scroll after a few pixels, and the drag ends where it began.

const REACH_PX = 34; // round the dot's centre: a target of 44 px and what a finger misses by

let finger = null; // of the touch under way on a drawing: where it began, whether on the map, whether it drags (null: not known yet)

/** The dot's centre in page pixels, or null while nothing is drawn. */
function dotPlace(page) {
  const dot = page.link?.document?.get_model_by_name("dot");
  const view = dot && window.Bokeh.index.find_one(dot);
  if (!view) return null;
  const { glyph, data_source } = dot;
  const [[across], [up]] = [glyph.x, glyph.y].map(({ field }) => data_source.data[field]);
  if (across === undefined) return null;
  const { frame, canvas_view } = view.plot_view;
  const area = canvas_view.el.getBoundingClientRect();
  return [area.left + frame.x_scale.compute(across), area.top + frame.y_scale.compute(up)];
}

function begun(page, event) {
  const path = event.composedPath();
  finger = null;
  if (event.touches.length > 1 || !path.some((part) => part.classList?.contains("bk-events"))) return;
  const { clientX: x, clientY: y } = event.changedTouches[0];
  const onMap = path.some((part) => part.id === "slot-map");
  const dot = onMap ? dotPlace(page) : null;
  const near = dot !== null && Math.hypot(x - dot[0], y - dot[1]) <= REACH_PX;
  finger = { x, y, onMap, drags: onMap ? near : null };
  if (near) event.preventDefault();
}

function moved(event) {
  if (finger === null) return;
  if (finger.drags === null) {
    // The first move decides for the browser whether it scrolls, so it must decide here as well.
    const { clientX, clientY } = event.changedTouches[0];
    finger.drags = Math.abs(clientX - finger.x) > Math.abs(clientY - finger.y);
  }
  if (finger.drags && event.cancelable) event.preventDefault();
}

/**
 * Lets a finger scroll the page past a drawing whose time can be moved and zoomed; Bokeh would keep every touch of such a drawing to itself.
 * A part that is named differently in another Bokeh stays as it is.
 */
export function shareTouches(Bokeh) {
  const { PlotView } = Bokeh.require("models/plots/plot_canvas") ?? {};
  if (!PlotView?.prototype._update_touch_action) return;
  PlotView.prototype._update_touch_action = function () {
    const moves = this.model.toolbar.tools.some((tool) => tool.active);
    this.canvas.touch_action.replace(`.bk-events { touch-action: ${moves ? "pan-y" : "auto"}; }`);
  };
}

/** Joins the touches of all drawings; `page.link` is looked up at each use. */
export function startTouch(page) {
  window.addEventListener("touchstart", (event) => begun(page, event), { capture: true, passive: false });
  window.addEventListener("touchmove", moved, { capture: true, passive: false });
  // A finger that scrolls past the dot must not move the case: the map does not hear of it.
  const keepFromMap = (event) => {
    if (event.pointerType === "touch" && finger?.onMap && !finger.drags) event.stopImmediatePropagation();
  };
  window.addEventListener("pointermove", keepFromMap, { capture: true });
}
