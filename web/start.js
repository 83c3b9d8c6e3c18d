// Runs before all else, in words that every browser understands: either the page's modules start, or a sentence says why not.
(function () {
  "use strict";
  var app = document.currentScript.getAttribute("data-app");

  // A link brings its own case: the opening case's pictures must not stand above somebody else's numbers, not even for seconds.
  if (location.hash.length > 1) document.body.setAttribute("data-linked", "");

  function say(sentence, support) {
    document.body.setAttribute("data-state", "failed");
    document.getElementById("boot").hidden = true;
    document.getElementById("failed").hidden = false;
    document.getElementById("failed-sentence").textContent = sentence;
    document.getElementById("failed-support").textContent = support;
    document.getElementById("copy-support").hidden = true;
    document.getElementById("restart").textContent = "Load the page again";
    document.getElementById("restart").onclick = function () { location.reload(); };
  }

  function missing() {
    if (location.protocol === "file:") return "a web server (this page was opened as a file)";
    if (typeof WebAssembly !== "object" || typeof Worker !== "function" || typeof BigInt64Array !== "function") return "WebAssembly and workers";
    if (!("noModule" in document.createElement("script"))) return "script modules";
    if (typeof ResizeObserver !== "function" || typeof structuredClone !== "function") return "functions of a browser from 2023 or later";
    return null;
  }

  var lacking = missing();
  if (lacking) {
    say("Lagscape cannot run here: it needs " + lacking + ". Firefox 115, Chrome 110, Edge 110, Safari 16.4 or newer can run it.", navigator.userAgent);
    return;
  }
  var script = document.createElement("script");
  script.type = "module";
  script.src = app + "page.js";
  script.onerror = function () {
    say("A part of the page is missing: it was probably renewed on the server. Load the page again.", "page.js did not load from " + script.src);
  };
  document.head.appendChild(script);
})();
