// An evolution map that fills up row by row, a byte each: contrast and the two intensities, and
// S2/S0 and S3/S0 where the whole map has been fetched.

const GROWING = 3;

/** Whether a plane holds intensities; the others hold what lies between −1 and 1. */
export const isIntensity = (plane) => plane === 1 || plane === 2;

export class Evolution {
  constructor(rows, columns) {
    this.rows = rows;
    this.columns = columns;
    this.scale = 0;
    this.planes = GROWING;
    this.data = new Uint8Array(GROWING * rows * columns);
    // How often each row has been taken in; 0 while it is awaited.
    this.filled = new Uint8Array(rows);
  }

  /** Take in rows first..first+count, given as planes one after the other. */
  absorb(planes, first, count, scale) {
    this.#bringTo(scale);
    const size = this.columns;
    const given = planes.length / (count * size);
    if (given > this.planes) this.#widen(given);
    for (let plane = 0; plane < given; plane += 1) {
      const from = plane * count * size;
      this.data.set(
        planes.subarray(from, from + count * size),
        (plane * this.rows + first) * size,
      );
    }
    for (let row = first; row < first + count; row += 1) this.filled[row] += 1;
  }

  #widen(planes) {
    const wider = new Uint8Array(planes * this.rows * this.columns);
    wider.set(this.data);
    Object.assign(this, { planes, data: wider });
  }

  // Rows that arrived under another scale are requantized, so one scale holds for the whole map.
  #bringTo(scale) {
    if (this.scale && scale !== this.scale) {
      const factor = this.scale / scale;
      const size = this.rows * this.columns;
      for (let i = size; i < GROWING * size; i += 1) {
        this.data[i] = Math.min(255, Math.round(this.data[i] * factor));
      }
    }
    this.scale = scale;
  }

  /** The quantity at a row and column: a Stokes ratio in [−1, 1] or intensity in W; null when absent. */
  at(plane, row, column) {
    if (!this.filled[row] || plane >= this.planes) return null;
    const byte = this.data[(plane * this.rows + row) * this.columns + column];
    return isIntensity(plane) ? byte * this.scale : (2 * byte) / 255 - 1;
  }
}

/** Bytes of a base64 text. */
export function bytesOf(text) {
  const binary = atob(text);
  const bytes = new Uint8Array(binary.length);
  for (let i = 0; i < binary.length; i += 1) bytes[i] = binary.charCodeAt(i);
  return bytes;
}

/** Index of the value nearest to x in an ascending list. */
export function nearest(values, x) {
  let best = 0;
  for (let i = 1; i < values.length; i += 1) {
    if (Math.abs(values[i] - x) < Math.abs(values[best] - x)) best = i;
  }
  return best;
}
