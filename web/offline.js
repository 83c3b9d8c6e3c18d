// Use without a network, and the quiet line when a newer version waits.

/** Registers the service worker. show(line, on): shows or hides "offline" or "version". Returns { useNewVersion }. */
export function startOffline(show) {
  const tell = () => show("offline", navigator.onLine === false);
  window.addEventListener("online", tell);
  window.addEventListener("offline", tell);
  tell();
  let waiting = null;

  function offer(worker) {
    waiting = worker;
    show("version", true);
  }

  // Plain http on an intranet has no service workers: the page then needs its server, and says nothing about it.
  async function register() {
    if (!("serviceWorker" in navigator)) return;
    try {
      const registration = await navigator.serviceWorker.register("service_worker.js");
      if (registration.waiting && navigator.serviceWorker.controller) offer(registration.waiting);
      registration.addEventListener("updatefound", () => {
        const coming = registration.installing;
        coming?.addEventListener("statechange", () => {
          if (coming.state === "installed" && navigator.serviceWorker.controller) offer(coming);
        });
      });
    } catch {
      // Private windows refuse service workers; the page works without.
    }
  }

  return {
    register,
    /** Lets the waiting version take over and loads the page again from it. */
    useNewVersion() {
      if (!waiting) return;
      navigator.serviceWorker.addEventListener("controllerchange", () => location.reload(), { once: true });
      waiting.postMessage("take over");
    },
  };
}
