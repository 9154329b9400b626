// Colours, all computed in OKLab so that equal steps look equal.

function toLinear(lightness, chroma, hueDegrees) {
  const hue = (hueDegrees * Math.PI) / 180;
  const a = chroma * Math.cos(hue);
  const b = chroma * Math.sin(hue);
  const l = (lightness + 0.3963377774 * a + 0.2158037573 * b) ** 3;
  const m = (lightness - 0.1055613458 * a - 0.0638541728 * b) ** 3;
  const s = (lightness - 0.0894841775 * a - 1.291485548 * b) ** 3;
  return [
    4.0767416621 * l - 3.3077115913 * m + 0.2309699292 * s,
    -1.2684380046 * l + 2.6097574011 * m - 0.3413193965 * s,
    -0.0041960863 * l - 0.7034186147 * m + 1.707614701 * s,
  ];
}

const inGamut = (linear) => linear.every((x) => x >= -1e-4 && x <= 1.0001);

function encode(x) {
  const clipped = Math.min(1, Math.max(0, x));
  const coded = clipped <= 0.0031308 ? 12.92 * clipped : 1.055 * clipped ** (1 / 2.4) - 0.055;
  return Math.round(255 * coded);
}

/** sRGB bytes of an OKLCH colour; chroma gives way, never lightness, when it leaves the gamut. */
export function bytes(lightness, chroma, hueDegrees) {
  let linear = toLinear(lightness, chroma, hueDegrees);
  if (!inGamut(linear)) {
    let low = 0;
    let high = chroma;
    for (let i = 0; i < 20; i += 1) {
      const middle = (low + high) / 2;
      if (inGamut(toLinear(lightness, middle, hueDegrees))) low = middle;
      else high = middle;
    }
    linear = toLinear(lightness, low, hueDegrees);
  }
  return linear.map(encode);
}

export function css([red, green, blue]) {
  return `#${[red, green, blue].map((x) => x.toString(16).padStart(2, "0")).join("")}`;
}

/** WCAG contrast ratio of two colours given as bytes. */
export function contrastRatio(first, second) {
  const luminance = (colour) => {
    const [r, g, b] = colour.map((x) => {
      const c = x / 255;
      return c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
    });
    return 0.2126 * r + 0.7152 * g + 0.0722 * b;
  };
  const [bright, dim] = [luminance(first), luminance(second)].sort((x, y) => y - x);
  return (bright + 0.05) / (dim + 0.05);
}

const HUE_1 = 52;
const HUE_2 = 268;

function table(colourAt) {
  return Array.from({ length: 256 }, (_, i) => colourAt(i / 255));
}

/** Contrast: component 2 at −1, a bright neutral at 0 for the walls, component 1 at +1. */
export const CONTRAST_MAP = table((x) => {
  const signed = 2 * x - 1;
  const size = Math.abs(signed);
  return bytes(0.92 - 0.5 * size, 0.165 * size ** 0.85, signed > 0 ? HUE_1 : HUE_2);
});

function intensityMap(hue, drift) {
  return table((x) => bytes(0.13 + 0.83 * x, 0.17 * Math.sin(Math.PI * x ** 0.9), hue + drift * x));
}

/** Intensity of each component in the hue that its sign of the contrast has. */
export const INTENSITY_MAPS = [intensityMap(HUE_1 - 22, 50), intensityMap(HUE_2 + 14, -50)];

/** Densities, in a hue that neither component has. */
export const DENSITY_MAP = table((x) => bytes(0.16 + 0.79 * x, 0.15 * Math.sin(Math.PI * (0.1 + 0.8 * x)), 190 - 70 * x));

// Chosen by search, each as far as can be from those before it, in normal vision and in simulated
// protan, deutan and tritan vision, at a contrast of 3 or more; a variant keeps its hue in both themes.
const VARIANT_OKLCH = {
  light: [
    [0.44, 0.2, 276], [0.64, 0.15, 60], [0.64, 0.15, 216], [0.34, 0.2, 0],
    [0.46, 0.2, 96], [0.58, 0.03, 348], [0.34, 0.1, 264], [0.49, 0.15, 0],
  ],
  dark: [
    [0.7, 0.2, 276], [0.78, 0.15, 60], [0.94, 0.15, 216], [0.58, 0.2, 0],
    [0.62, 0.2, 96], [0.74, 0.03, 348], [0.58, 0.1, 264], [0.86, 0.15, 0],
  ],
};

const COMPONENT_OKLCH = {
  light: [[0.58, 0.16, HUE_1 - 8], [0.45, 0.17, HUE_2]],
  dark: [[0.76, 0.14, HUE_1], [0.72, 0.13, HUE_2]],
};

/** Colour of a variant, by its number; the marker tells apart those that share one. */
export function variantBytes(theme, index) {
  const palette = VARIANT_OKLCH[theme];
  return bytes(...palette[index % palette.length]);
}

export const variantColour = (theme, index) => css(variantBytes(theme, index));

export const componentColours = (theme) => COMPONENT_OKLCH[theme].map((c) => css(bytes(...c)));

/** Marker shapes; their number has no factor in common with that of the colours. */
export const MARKERS = [
  "circle", "square", "diamond", "triangle-up", "cross",
  "triangle-down", "x", "pentagon", "hexagram",
];

export const variantMarker = (index) => MARKERS[index % MARKERS.length];

/** A table of colours as a plotly colour scale. */
export function scaleOf(colours, stops = 17) {
  return Array.from({ length: stops }, (_, i) => {
    const x = i / (stops - 1);
    return [x, css(colours[Math.round(255 * x)])];
  });
}
