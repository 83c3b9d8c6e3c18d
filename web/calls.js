// Carries out what the application asks of the page.
import { copyText } from "./clipboard.js";

function download({ name, type, data }) {
  const address = URL.createObjectURL(new Blob([data], { type }));
  const anchor = document.createElement("a");
  anchor.href = address;
  anchor.download = name;
  anchor.click();
  setTimeout(() => URL.revokeObjectURL(address), 60000);
}

function print({ html }) {
  const frame = document.createElement("iframe");
  frame.className = "unseen";
  frame.setAttribute("aria-hidden", "true");
  frame.title = "Page to print";
  frame.onload = () => {
    frame.contentWindow.addEventListener("afterprint", () => frame.remove());
    frame.contentWindow.print();
  };
  frame.srcdoc = html;
  document.body.append(frame);
}

const addressWith = (link) => `${location.href.split("#")[0]}#${link}`;

async function copyAndSay(page, text, what) {
  const copied = await copyText(text);
  if (copied) page.state.say("bar", `${what} is on the clipboard.`, "note");
  else page.state.say("bar", `The browser does not allow copying here. Select this and copy it: ${text}`, "note");
}

const answers = {
  download: (page, payload) => download(payload),
  set_hash: (page, { link }) => history.replaceState(null, "", link ? addressWith(link) : addressWith("").slice(0, -1)),
  copy_link: (page, { link }) => copyAndSay(page, addressWith(link), "The link"),
  copy_text: (page, { text, what }) => copyAndSay(page, text, what),
  keep_case: (page, { link }) => {
    page.keptCase = link;
  },
  focus: (page, { place }) => (document.getElementById(place) ?? document.getElementById(`slot-${place}`))?.focus(),
  say: (page, { place, text, tone }) => page.state.say(place, text, tone),
  standing: (page, { text, state }) => page.state.standing(text, state),
  show: (page, { view, open }) => page.state.show(view, open),
  units: (page, { pressure }) => {
    for (const radio of document.querySelectorAll("#units input")) radio.checked = radio.value === pressure;
  },
  progress: (page, payload) => page.state.workBar.show(payload),
  print: (page, payload) => print(payload),
};

/** Carries out one call; its fields were checked when the message was read. */
export function answerCall(page, name, payload) {
  answers[name](page, payload);
}
