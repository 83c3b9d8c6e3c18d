// Unpacks an uncompressed zip file into the runtime's file system without copying: each file is a view into the one buffer.

const END_OF_DIRECTORY = 0x06054b50;
const DIRECTORY_ENTRY = 0x02014b50;
const STORED = 0;

/** The entries of a zip file as [name, view of its bytes]; throws RangeError for a file that is cut off or compressed. */
export function entries(buffer) {
  const view = new DataView(buffer);
  let end = buffer.byteLength - 22;
  while (end >= 0 && view.getUint32(end, true) !== END_OF_DIRECTORY) end -= 1;
  if (end < 0) throw new RangeError("a bundle is cut off: its directory is missing");
  const count = view.getUint16(end + 10, true);
  let at = view.getUint32(end + 16, true);
  const decoder = new TextDecoder();
  const found = [];
  for (let i = 0; i < count; i += 1) {
    if (view.getUint32(at, true) !== DIRECTORY_ENTRY) throw new RangeError("a bundle is damaged: its directory does not hold");
    if (view.getUint16(at + 10, true) !== STORED) throw new RangeError("a bundle is compressed, it must be stored");
    const size = view.getUint32(at + 24, true);
    const nameLength = view.getUint16(at + 28, true);
    const local = view.getUint32(at + 42, true);
    const name = decoder.decode(new Uint8Array(buffer, at + 46, nameLength));
    const start = local + 30 + view.getUint16(local + 26, true) + view.getUint16(local + 28, true);
    found.push([name, new Uint8Array(buffer, start, size)]);
    at += 46 + nameLength + view.getUint16(at + 30, true) + view.getUint16(at + 32, true);
  }
  return found;
}

/** Lays every file of the zip under `folder`. fs: the runtime's file system. */
export function unpack(fs, buffer, folder) {
  const made = new Set();
  for (const [name, bytes] of entries(buffer)) {
    const path = `${folder}/${name}`;
    const parent = path.slice(0, path.lastIndexOf("/"));
    if (!made.has(parent)) {
      fs.mkdirTree(parent);
      made.add(parent);
    }
    fs.writeFile(path, bytes, { canOwn: true });
  }
}
