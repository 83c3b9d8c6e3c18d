// Putting text on the clipboard, the new way and the old.

/** Puts text on the clipboard; false if the browser does not let us. */
export async function copyText(text) {
  try {
    await navigator.clipboard.writeText(text);
    return true;
  } catch {
    // Plain http has no clipboard interface: the older way needs a selected text field.
    const field = document.createElement("textarea");
    field.value = text;
    field.className = "unseen";
    document.body.append(field);
    field.select();
    const copied = document.execCommand("copy");
    field.remove();
    return copied;
  }
}
