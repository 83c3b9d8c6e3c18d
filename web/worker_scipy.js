// Fetches scipy when it is first asked for. Its bundle is a stored zip inside gzip: three times smaller on the way, and its hundred
// native parts are compiled only as they are imported, which the runtime's own way of loading a wheel does all at once.
import { unpack } from "./worker_unpack.js";

const SITE_PACKAGES = "/lib/python3.12/site-packages";

async function fetchBundle(address, count) {
  const answer = await fetch(address);
  if (!answer.ok) throw new Error(`${address.split("/").pop()} could not be fetched (status ${answer.status})`);
  const counter = new TransformStream({
    transform(chunk, controller) {
      count(chunk.byteLength);
      controller.enqueue(chunk);
    },
  });
  return new Response(answer.body.pipeThrough(counter).pipeThrough(new DecompressionStream("gzip"))).arrayBuffer();
}

/**
 * Makes `import scipy` work in the runtime. library: address of the folder with the runtime's files; size: of the bundle in bytes;
 * fetched(share) is told which share of the bundle has arrived.
 */
export async function loadScipy(pyodide, library, size = 0, fetched = () => {}) {
  let bytes = 0;
  const bundle = fetchBundle(`${library}scipy.bundle`, (more) => {
    bytes += more;
    fetched(Math.min(bytes / size, 1));
  });
  bundle.catch(() => {}); // reported where it is waited for
  // scipy's parts ask for this library by name, so it must be there before the first of them.
  await pyodide.loadPackage("openblas", { messageCallback: () => {}, checkIntegrity: true });
  unpack(pyodide.FS, await bundle, SITE_PACKAGES);
}
