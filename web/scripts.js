// Loads classic scripts in their order, all fetched at once.

/** Resolves when every address has run; rejects with a sentence when one is missing. */
export function loadScripts(addresses) {
  const loaded = Promise.all(
    addresses.map(
      (address) =>
        new Promise((resolve, reject) => {
          const script = document.createElement("script");
          script.src = address;
          script.async = false; // keeps the order of execution
          script.onload = resolve;
          script.onerror = () => reject(new Error(`${address.split("/").pop()} did not load`));
          document.head.appendChild(script);
        }),
    ),
  );
  loaded.catch(() => {}); // reported where it is waited for
  return loaded;
}

/**
 * Spares Bokeh a look at the page's styles for every colour and font of every figure in every frame: it asks for custom properties
 * "--bk-...", which no style sheet here sets, and each question makes the browser work out its styles anew. A third of a drag's time.
 */
export function quickenDrawing(Bokeh) {
  const visual = Bokeh.require("core/visuals/visual");
  if (visual?.VisualProperties?.prototype._get_css_value) visual.VisualProperties.prototype._get_css_value = () => "";
}
