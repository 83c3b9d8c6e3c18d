// Newest wins: what waits while the worker is busy. Pure, no page and no Bokeh needed, so that it is tested alone.
// An item is { key, value, merge }:
//   key    a newer item replaces an older one of the same key; null: never replaced, and nothing is replaced across it, so that
//          the beginning and end of a movement, a click or a command keep their place among the changes around them
//   merge  optional (older, newer) => value, where the newer alone would lose something (steps of arrow keys)

export class NewestWinsQueue {
  constructor() {
    this.items = [];
  }

  get length() {
    return this.items.length;
  }

  /** Adds an item, or lets it take the place of an older one. */
  add(item) {
    if (item.key !== null) {
      for (let i = this.items.length - 1; i >= 0; i -= 1) {
        const older = this.items[i];
        if (older.key === item.key) {
          this.items[i] = item.merge ? { ...item, value: item.merge(older.value, item.value) } : item;
          return;
        }
        if (older.key === null) break;
      }
    }
    this.items.push(item);
  }

  /** Everything that waits, oldest first; the queue is empty afterwards. */
  takeAll() {
    const items = this.items;
    this.items = [];
    return items;
  }

  /** The longest run of items of one type from the front: changes go together in one patch, a command goes alone. */
  takeRun(isChange) {
    if (this.items.length === 0) return [];
    if (!isChange(this.items[0])) return [this.items.shift()];
    let end = 0;
    while (end < this.items.length && isChange(this.items[end])) end += 1;
    return this.items.splice(0, end);
  }
}
