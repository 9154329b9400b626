// The Stokes sphere seen from a place: which of its equal-area bins are in sight, and where.

const DEGREE = Math.PI / 180;

/** The point at a height S3 and an azimuth, on the unit sphere. */
const point = (s3, azimuth) => {
  const radius = Math.sqrt(Math.max(0, 1 - s3 * s3));
  return [radius * Math.cos(azimuth), radius * Math.sin(azimuth), s3];
};

/** A view along the direction of this longitude and latitude, in degrees. */
export class View {
  constructor(longitude, latitude) {
    this.longitude = longitude;
    this.latitude = Math.max(-90, Math.min(90, latitude));
    const [cl, sl] = [Math.cos(this.longitude * DEGREE), Math.sin(this.longitude * DEGREE)];
    const [cb, sb] = [Math.cos(this.latitude * DEGREE), Math.sin(this.latitude * DEGREE)];
    this.right = [-sl, cl, 0];
    this.up = [-sb * cl, -sb * sl, cb];
    this.towards = [cb * cl, cb * sl, sb];
  }

  turned(longitude, latitude) {
    return new View(this.longitude + longitude, this.latitude + latitude);
  }

  /** [across, up, depth] of a point; depth > 0 is the near side. */
  place(vector) {
    const dot = (axis) => axis[0] * vector[0] + axis[1] * vector[1] + axis[2] * vector[2];
    return [dot(this.right), dot(this.up), dot(this.towards)];
  }

  /** The point of the near side at a place of the picture; null beside the sphere. */
  pointAt(across, up) {
    const depth = Math.sqrt(1 - across * across - up * up);
    if (Number.isNaN(depth)) return null;
    return [0, 1, 2].map((i) => across * this.right[i] + up * this.up[i] + depth * this.towards[i]);
  }
}

/** Bins of equal area: rows of equal height in S3, columns of equal azimuth, row by row. */
export class Bins {
  constructor(rows, columns) {
    Object.assign(this, { rows, columns });
  }

  /** Number of the bin that holds a point. */
  at([s1, s2, s3]) {
    const within = (x, count) => Math.min(count - 1, Math.max(0, Math.floor(x * count)));
    const azimuth = Math.atan2(s2, s1);
    return within((s3 + 1) / 2, this.rows) * this.columns +
      within((azimuth + Math.PI) / (2 * Math.PI), this.columns);
  }

  /** Centre of a bin: [S3/S0, azimuth in degrees]. */
  centre(index) {
    const row = Math.floor(index / this.columns);
    const column = index % this.columns;
    return [(2 * (row + 0.5)) / this.rows - 1, (360 * (column + 0.5)) / this.columns - 180];
  }

  /** The bins in sight: [{index, corners: [[across, up], …]}]. */
  seen(view) {
    const found = [];
    for (let row = 0; row < this.rows; row += 1) {
      const [low, high] = [row, row + 1].map((i) => (2 * i) / this.rows - 1);
      for (let column = 0; column < this.columns; column += 1) {
        const [west, middle, east] = [0, 0.5, 1].map((i) => (2 * Math.PI * (column + i)) / this.columns - Math.PI);
        const edge = [[low, west], [low, middle], [low, east], [high, east], [high, middle], [high, west]];
        const corners = edge.map(([s3, azimuth]) => view.place(point(s3, azimuth)));
        if (corners.every(([, , depth]) => depth <= 0)) continue;
        found.push({ index: row * this.columns + column, corners: corners.map(toRim) });
      }
    }
    return found;
  }
}

/** A corner behind the rim is drawn on the rim. */
function toRim([across, up, depth]) {
  if (depth >= 0) return [across, up];
  const size = Math.hypot(across, up) || 1;
  return [across / size, up / size];
}

/** Lines of the sphere in sight: the equator and the two great circles through S3. */
export function circles(view) {
  const around = Array.from({ length: 91 }, (_, i) => (2 * Math.PI * i) / 90);
  const rings = [
    (t) => [Math.cos(t), Math.sin(t), 0],
    (t) => [Math.cos(t), 0, Math.sin(t)],
    (t) => [0, Math.cos(t), Math.sin(t)],
  ];
  return rings.flatMap((ring) => {
    const pieces = [[]];
    for (const t of around) {
      const [across, up, depth] = view.place(ring(t));
      if (depth >= 0) pieces.at(-1).push([across, up]);
      else if (pieces.at(-1).length) pieces.push([]);
    }
    return pieces.filter((piece) => piece.length > 1);
  });
}

/** The ends of the axes: [{name, across, up, near}]. */
export function axisEnds(view) {
  const ends = [["S1", 1, 0, 0], ["−S1", -1, 0, 0], ["S2", 0, 1, 0], ["−S2", 0, -1, 0], ["S3", 0, 0, 1], ["−S3", 0, 0, -1]];
  return ends.map(([name, ...vector]) => {
    const [across, up, depth] = view.place(vector);
    return { name, across, up, near: depth >= -1e-9 };
  });
}
