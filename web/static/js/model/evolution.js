// An evolution map that fills up row by row: contrast and the two intensities, a byte each.

export const QUANTITIES = ["contrast", "intensity1", "intensity2"];

export class Evolution {
  constructor(rows, columns) {
    this.rows = rows;
    this.columns = columns;
    this.scale = 0;
    this.data = new Uint8Array(3 * rows * columns);
    // How often each row has been taken in; 0 while it is awaited.
    this.filled = new Uint8Array(rows);
  }

  /** Take in rows first..first+count, given as three planes one after the other. */
  absorb(planes, first, count, scale) {
    this.#bringTo(scale);
    const size = this.columns;
    for (let plane = 0; plane < 3; plane += 1) {
      const from = plane * count * size;
      this.data.set(
        planes.subarray(from, from + count * size),
        (plane * this.rows + first) * size,
      );
    }
    for (let row = first; row < first + count; row += 1) this.filled[row] += 1;
  }

  // Rows that arrived under another scale are requantized, so one scale holds for the whole map.
  #bringTo(scale) {
    if (this.scale && scale !== this.scale) {
      const factor = this.scale / scale;
      for (let i = this.rows * this.columns; i < this.data.length; i += 1) {
        this.data[i] = Math.min(255, Math.round(this.data[i] * factor));
      }
    }
    this.scale = scale;
  }

  /** The quantity at a row and column: contrast in [−1, 1] or intensity in W; null when absent. */
  at(plane, row, column) {
    if (!this.filled[row]) return null;
    const byte = this.data[(plane * this.rows + row) * this.columns + column];
    return plane === 0 ? (2 * byte) / 255 - 1 : byte * this.scale;
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
