// Fetches with a count of the bytes that have arrived, so that the start shows true progress.

/**
 * A fetch that counts. sizes: file name to length in bytes, for the files that belong to the start; others are not counted.
 * report(bytes, total) is called at most every 50 ms, and once when all have arrived.
 */
export function countedFetch(plainFetch, sizes, report) {
  const total = Object.values(sizes).reduce((sum, size) => sum + size, 0);
  const unnoticed = new Map(); // files whose end the browser tells late: name to length
  let bytes = 0;
  let last = 0;

  function count(more) {
    bytes += more;
    const now = performance.now();
    if (now - last > 50 || bytes >= total) {
      last = now;
      report(Math.min(bytes, total), total);
    }
  }

  function notice(name) {
    const size = unnoticed.get(name);
    if (size === undefined) return;
    unnoticed.delete(name);
    count(size);
  }

  function countWhenFetched(address, name) {
    unnoticed.set(name, sizes[name]);
    const observer = new PerformanceObserver((list) => {
      if (!list.getEntriesByName(address).length) return;
      observer.disconnect();
      notice(name);
    });
    observer.observe({ type: "resource", buffered: true });
  }

  /** Tells what has arrived now, whatever was told last; `name` is a file that is known to be there. */
  fetchCounted.tell = (name) => {
    notice(name);
    report(Math.min(bytes, total), total);
  };
  return fetchCounted;

  async function fetchCounted(resource, options) {
    const address = typeof resource === "string" ? resource : (resource.url ?? String(resource));
    const name = address.split(/[?#]/)[0].split("/").pop();
    const answer = await plainFetch(resource, options);
    if (!answer.ok) throw new Error(`${name} could not be fetched (status ${answer.status})`);
    if (!(name in sizes) || !answer.body) return answer;
    if (name.endsWith(".wasm")) {
      // The browser keeps compiled WebAssembly with the answer itself: a copy of the answer would be compiled anew at every visit.
      countWhenFetched(address, name);
      if (answer.headers.get("content-type")?.startsWith("application/wasm")) return answer;
      // Under any other type the browser refuses to compile what it loads, and the runtime would wait for ever.
      return new Response(answer.body, { headers: { "content-type": "application/wasm" } });
    }
    const counter = new TransformStream({
      transform(chunk, controller) {
        count(chunk.byteLength);
        controller.enqueue(chunk);
      },
    });
    return new Response(answer.body.pipeThrough(counter), { status: answer.status, headers: answer.headers });
  }
}
