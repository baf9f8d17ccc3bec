// One field on a grid of two axes, drawn pixel by pixel; what cannot be drawn here comes as a PNG from the service.

import { DIVERGING, MISSING, SEQUENTIAL } from "./colours.js";
import { h } from "./elements.js";
import { digits } from "./words.js";

// Above this a picture is drawn by the service: 4 MB of numbers for each mode are more than a page should fetch.
export const MAX_VALUES = 1e6;
const MAX_PIXELS_ACROSS = 900;

export function axesOf(grid) {
  if (grid.kind === "rectilinear") return grid.axes;
  if (grid.kind !== "uniform") return null;
  const origin = grid.origin || grid.shape.map(() => 0);
  return grid.shape.map((n, k) => Float64Array.from({ length: n }, (_, i) => origin[k] + i * grid.spacing[k]));
}

export function drawnHere(declaration) {
  const { grid, fields, n_points: n } = declaration;
  return (grid.shape || grid.axes || []).length === 2 && n * fields.length <= MAX_VALUES;
}

// Where each pixel looks up its value, and how large the picture is; made once for a grid.
export function planOf(grid) {
  const [rows, columns] = axesOf(grid);
  const [width, height] = [extent(columns), extent(rows)];
  const ratio = Math.min(12, Math.max(1 / 4, width / height));
  const across = Math.min(MAX_PIXELS_ACROSS, Math.max(300, columns.length * 2));
  const down = Math.max(24, Math.round(across / ratio));
  return { columns: nearest(columns, across), rows: nearest(rows, down).reverse(), n: columns.length, across, down,
    span: [columns[0], columns[columns.length - 1], rows[0], rows[rows.length - 1]] };
}

function edges(axis) {
  const n = axis.length;
  if (n === 1) return [axis[0] - 0.5, axis[0] + 0.5];
  const middle = Array.from({ length: n - 1 }, (_, i) => (axis[i] + axis[i + 1]) / 2);
  return [2 * axis[0] - middle[0], ...middle, 2 * axis[n - 1] - middle[n - 2]];
}

function extent(axis) {
  const borders = edges(axis);
  return borders[borders.length - 1] - borders[0];
}

// index of the cell in which each of `pixels` pixels lies
function nearest(axis, pixels) {
  const borders = edges(axis);
  const [first, last] = [borders[0], borders[borders.length - 1]];
  let cell = 0;
  return Int32Array.from({ length: pixels }, (_, p) => {
    const place = first + ((p + 0.5) / pixels) * (last - first);
    while (cell < axis.length - 1 && place > borders[cell + 1]) cell += 1;
    return cell;
  });
}

export function largest(values) {
  let top = 0;
  for (const value of values) if (Math.abs(value) > top) top = Math.abs(value); // NaN compares false
  return top || 1;
}

// Colours from low to high; for modes low is -high, so that the neutral colour stands for zero.
export function paint(canvas, plan, values, low, high, signed = true) {
  [canvas.width, canvas.height] = [plan.across, plan.down];
  const context = canvas.getContext("2d");
  const image = context.createImageData(plan.across, plan.down);
  const colours = signed ? DIVERGING : SEQUENTIAL;
  const steps = colours.length / 3 - 1;
  const factor = steps / (high - low || 1);
  let at = 0;
  for (const row of plan.rows) {
    const start = row * plan.n;
    for (const column of plan.columns) {
      const value = values[start + column];
      const k = 3 * Math.min(steps, Math.max(0, Math.round((value - low) * factor)));
      const missing = Number.isNaN(value);
      for (let c = 0; c < 3; c += 1) image.data[at + c] = missing ? MISSING[c] : colours[k + c];
      image.data[at + 3] = 255;
      at += 4;
    }
  }
  context.putImageData(image, 0, 0);
}

// The scale beside a picture: colours from low to high, and the numbers in words.
export function scaleBar(low, high, unit, signed = true) {
  const canvas = h("canvas", { class: "scale", width: 257, height: 1, "aria-hidden": "true" });
  const context = canvas.getContext("2d");
  const image = context.createImageData(257, 1);
  const colours = signed ? DIVERGING : SEQUENTIAL;
  for (let k = 0; k < 257; k += 1) image.data.set([...colours.subarray(3 * k, 3 * k + 3), 255], 4 * k);
  context.putImageData(image, 0, 0);
  const text = unit === "1" ? "" : ` ${unit}`;
  const middle = signed ? "0" : digits((low + high) / 2);
  return h("div", { class: "scalebar" }, h("span", {}, digits(low)), h("span", {}, middle),
    h("span", {}, digits(high) + text), canvas);
}
