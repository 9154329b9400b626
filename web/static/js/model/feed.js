// The event stream of one page. A browser gives up on a stream that once answered anything but
// 200, so this reopens by itself, later each time, from the last event that arrived.

const FIRST_WAIT_MS = 500;
const LONGEST_WAIT_MS = 15_000;

export class Feed {
  #source = null;
  #timer = null;
  #wait = FIRST_WAIT_MS;
  #ended = false;

  /** address(after) gives the URL; take(type, data) receives events; broken(isBroken) tells. */
  constructor({ address, types, after, take, broken }) {
    this.address = address;
    this.types = types;
    this.after = after;
    this.take = take;
    this.broken = broken;
  }

  open() {
    if (this.#source || this.#ended) return;
    clearTimeout(this.#timer);
    const source = new EventSource(this.address(this.after));
    this.#source = source;
    source.addEventListener("open", () => {
      this.#wait = FIRST_WAIT_MS;
      this.broken(false);
    });
    for (const type of this.types) {
      source.addEventListener(type, (event) => {
        if (event.lastEventId) this.after = event.lastEventId;
        this.take(type, JSON.parse(event.data));
      });
    }
    source.addEventListener("error", () => this.#retry());
  }

  #retry() {
    this.close();
    if (this.#ended) return;
    this.broken(true);
    this.#timer = setTimeout(() => this.open(), this.#wait);
    this.#wait = Math.min(LONGEST_WAIT_MS, 2 * this.#wait);
  }

  /** Close for now: open() goes on from the last event. */
  close() {
    clearTimeout(this.#timer);
    this.#source?.close();
    this.#source = null;
  }

  /** Close for good. */
  end() {
    this.#ended = true;
    this.close();
  }
}
