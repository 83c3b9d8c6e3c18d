// What the user does outside the drawn parts: buttons of the bar, files chosen or dropped, keys on the map, closing a view.

const TYPED_INTO = "input:not([type=radio]):not([type=range]), textarea, select, [contenteditable=true]";

// Panel's boxes live in shadow roots: the element that really has the focus is inside.
function typingInto(event) {
  const target = event.composedPath()[0];
  return target instanceof Element && target.matches(TYPED_INTO);
}

function offerFile(page, command, file) {
  if (file) page.link.command(command, { name: file.name, bytes: file.size }, file);
}

function joinFileButton(page, button, input, command) {
  const field = document.getElementById(input);
  document.getElementById(button).addEventListener("click", () => field.click());
  field.addEventListener("change", () => {
    offerFile(page, command, field.files[0]);
    field.value = ""; // the same file can be chosen again
  });
}

function joinDrop(page) {
  const veil = document.getElementById("drop");
  const carriesFile = (event) => event.dataTransfer?.types.includes("Files");
  window.addEventListener("dragover", (event) => {
    if (!carriesFile(event)) return;
    event.preventDefault();
    event.dataTransfer.dropEffect = "copy";
    veil.hidden = false;
  });
  window.addEventListener("dragleave", (event) => {
    if (event.relatedTarget === null) veil.hidden = true;
  });
  window.addEventListener("drop", (event) => {
    veil.hidden = true;
    if (!carriesFile(event)) return;
    event.preventDefault();
    if (event.dataTransfer.files.length > 1) page.state.say("bar", "One file at a time, please: the first was opened.", "note");
    offerFile(page, "drop_file", event.dataTransfer.files[0]);
  });
}

const ARROWS = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] };

function joinKeys(page) {
  const map = document.getElementById("slot-map");
  // What is drawn inside cannot take the focus itself: a touch of the map gives it to the map, and the arrow keys work.
  map.addEventListener("pointerdown", () => map.focus({ preventScroll: true, focusVisible: false }));
  map.addEventListener("keydown", (event) => {
    const step = ARROWS[event.key];
    if (!step || event.ctrlKey || event.metaKey || event.altKey || event.target.id !== "slot-map") return;
    event.preventDefault();
    page.link.command("nudge", { right: step[0], up: step[1], large: event.shiftKey });
  });
  window.addEventListener("keydown", (event) => {
    if ((event.ctrlKey || event.metaKey) && !event.altKey && !typingInto(event)) {
      const key = event.key.toLowerCase();
      const command = key === "z" ? (event.shiftKey ? "redo" : "undo") : key === "y" ? "redo" : null;
      if (command) {
        event.preventDefault();
        page.link.command(command);
      }
    } else if (event.key === "Escape") {
      const open = document.querySelector(".over:not([hidden])");
      if (open) setView(page, open.id.slice("over-".length), false);
    }
  });
}

function setView(page, view, open) {
  page.state.show(view, open);
  page.link.command("show", { view, open });
}

/** Joins every input of the frame to the application. `page.link` is looked up at each use: a restart makes a new one. */
export function startInput(page) {
  joinFileButton(page, "open-recording", "recording-input", "open_recording");
  joinFileButton(page, "open-case", "case-input", "open_case");
  joinDrop(page);
  joinKeys(page);
  document.getElementById("stop-work").addEventListener("click", () => page.link.command("stop_work"));
  document.getElementById("save-case").addEventListener("click", () => page.link.command("save_case"));
  document.getElementById("copy-link").addEventListener("click", () => page.link.command("copy_link"));
  document.getElementById("open-handover").addEventListener("click", () => setView(page, "handover", true));
  document.getElementById("units").addEventListener("change", (event) => page.link.command("set_units", { pressure: event.target.value }));
  for (const button of document.querySelectorAll("[data-close]")) {
    button.addEventListener("click", () => setView(page, button.dataset.close, false));
  }
}
