// The world's agenda: callbacks at absolute virtual times, nanoseconds since the world began.

export class Agenda {
  constructor() {
    this.heap = [];
    this.order = 0;
    /** When the next entry is due; Infinity if there is none. A plain member: it is looked at for every instruction. */
    this.next = Infinity;
  }

  /** Calls `action` at `at`; entries of one time run in the order they were made. Returns a handle for `cancel`. */
  at(at, action) {
    const entry = { at, order: this.order++, action };
    const { heap } = this;
    let i = heap.push(entry) - 1;
    while (i > 0) {
      const parent = (i - 1) >> 1;
      if (!before(heap[i], heap[parent])) break;
      [heap[i], heap[parent]] = [heap[parent], heap[i]];
      i = parent;
    }
    this.next = heap[0].at;
    return entry;
  }

  cancel(entry) {
    if (entry) entry.action = null;
  }

  /** Takes the first entry out and runs it. */
  runNext() {
    const { heap } = this;
    const first = heap[0];
    const last = heap.pop();
    if (heap.length) {
      heap[0] = last;
      let i = 0;
      for (;;) {
        const left = 2 * i + 1;
        let least = i;
        if (left < heap.length && before(heap[left], heap[least])) least = left;
        if (left + 1 < heap.length && before(heap[left + 1], heap[least])) least = left + 1;
        if (least === i) break;
        [heap[i], heap[least]] = [heap[least], heap[i]];
        i = least;
      }
    }
    this.next = heap.length ? heap[0].at : Infinity;
    if (first.action) first.action();
  }
}

function before(a, b) {
  return a.at < b.at || (a.at === b.at && a.order < b.order);
}
