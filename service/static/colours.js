// The colour scales of the pictures, the same as in the service's own PNG files (service/colours.py): even steps of
// lightness in CIE L*C*h (D65), told apart by people who confuse red and green; zero is neutral.

const [NEUTRAL, END, HALF] = [96, 34, 128];
const [BLUE, BROWN, CHROMA] = [280, 52, 44];
const WHITE = [0.95047, 1.0, 1.08883];
const FROM_XYZ = [[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.204, 1.057]]; // IEC 61966-2-1

// (2 HALF + 1) x RGB, 0 to 255: from the most negative value to the most positive
export const DIVERGING = scale((part) => [
  NEUTRAL + (END - NEUTRAL) * Math.abs(part),
  CHROMA * Math.sin((Math.PI / 2) * Math.min(1, 1.4 * Math.abs(part))),
  part < 0 ? BLUE : BROWN,
]);

// for the mean: light is small, dark is large
export const SEQUENTIAL = scale((along) => {
  const part = (along + 1) / 2;
  const chroma = 28 * Math.sin(Math.PI * (0.1 + 0.75 * part)) * Math.min(1, 4 * part);
  return [NEUTRAL + (22 - NEUTRAL) * part, chroma, 130 + 120 * part];
});

export const MISSING = [154, 154, 154];

function scale(lch) {
  const table = new Uint8ClampedArray(3 * (2 * HALF + 1));
  for (let k = 0; k <= 2 * HALF; k += 1) table.set(srgb(...lch(k / HALF - 1)), 3 * k);
  return table;
}

function srgb(lightness, chroma, hue) {
  const angle = (hue * Math.PI) / 180;
  const fy = (lightness + 16) / 116;
  const f = [fy + (chroma * Math.cos(angle)) / 500, fy, fy - (chroma * Math.sin(angle)) / 200];
  const xyz = f.map((one, k) => WHITE[k] * (one > 6 / 29 ? one ** 3 : 3 * (6 / 29) ** 2 * (one - 4 / 29)));
  return FROM_XYZ.map((row) => {
    const linear = Math.min(1, Math.max(0, row[0] * xyz[0] + row[1] * xyz[1] + row[2] * xyz[2]));
    return 255 * (linear <= 0.0031308 ? 12.92 * linear : 1.055 * linear ** (1 / 2.4) - 0.055);
  });
}
