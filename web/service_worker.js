// Keeps one whole version of the site for use without a network. A version is installed whole or not at all, each file checked
// by its hash, and takes over only when the user says so or the last tab of the old one is closed.
"use strict";

// Written in by the build, so that the browser sees a new worker whenever anything of the site changed.
const VERSION = "site-version";
const PREFIX = "lagscape-";
const CACHE = PREFIX + VERSION;
const root = new URL("./", self.location.href).href;

async function fileList() {
  const answer = await fetch(`${root}files.json`, { cache: "no-cache" });
  if (!answer.ok) throw new Error("files.json could not be fetched");
  return answer.json();
}

function integrity(hex) {
  const bytes = hex.match(/../g).map((pair) => String.fromCharCode(parseInt(pair, 16)));
  return `sha256-${btoa(bytes.join(""))}`;
}

async function install() {
  const { version, files } = await fileList();
  if (version !== VERSION) throw new Error("the site is being renewed; the next visit tries again");
  const older = (await caches.keys()).filter((name) => name.startsWith(PREFIX) && name !== CACHE);
  const cache = await caches.open(CACHE);
  for (const [name, hash] of Object.entries(files)) {
    const address = root + name;
    if (await cache.match(address)) continue;
    // A file in a folder named by its content is the same in every version that has it: it need not travel twice.
    let answer = null;
    if (/^(lib|app)-/.test(name)) {
      for (const key of older) answer ??= (await (await caches.open(key)).match(address)) ?? null;
    }
    answer ??= await fetch(new Request(address, { cache: name.includes("/") ? "default" : "no-cache", integrity: integrity(hash) }));
    if (!answer.ok) throw new Error(`${name} could not be fetched`);
    await cache.put(address, answer);
  }
}

async function activate() {
  const names = await caches.keys();
  await Promise.all(names.filter((name) => name.startsWith(PREFIX) && name !== CACHE).map((name) => caches.delete(name)));
  await self.clients.claim();
}

async function answerFrom(request) {
  const address = request.url.split(/[?#]/)[0];
  const wanted = address === root ? `${root}index.html` : address;
  const kept = await (await caches.open(CACHE)).match(wanted);
  return kept ?? fetch(request);
}

self.addEventListener("install", (event) => event.waitUntil(install()));
self.addEventListener("activate", (event) => event.waitUntil(activate()));
self.addEventListener("message", (event) => {
  if (event.data === "take over") self.skipWaiting();
});
self.addEventListener("fetch", (event) => {
  if (event.request.method === "GET" && event.request.url.startsWith(root)) event.respondWith(answerFrom(event.request));
});
