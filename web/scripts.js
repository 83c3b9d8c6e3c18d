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
