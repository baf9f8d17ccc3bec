// The coefficients of a pair against each other: a ring that is run through one way is a travelling structure.

import { axis, colour } from "./chart.js";
import { percent } from "./words.js";

const ONE_WAY = 0.8; // of the area swept, signed; noise alone gives values near zero

// How far the pair turns one way: the signed share of the area swept by (a, b), from -1 to 1; pure.
export function turning(a, b) {
  let [signed, whole] = [0, 0];
  for (let i = 1; i < a.length; i += 1) {
    const area = a[i - 1] * b[i] - a[i] * b[i - 1];
    signed += area;
    whole += Math.abs(area);
  }
  return whole > 0 ? signed / whole : 0;
}

export function travels(turn) {
  return Math.abs(turn) >= ONE_WAY;
}

export function turningWords(turn) {
  return travels(turn)
    ? `The pair turns one way (${percent(Math.abs(turn))} of the area swept): a travelling structure.`
    : `The pair does not turn one way (${percent(Math.abs(turn))} of the area swept).`;
}

export function portraitOptions(names, top) {
  const range = [-1.05 * top, 1.05 * top];
  const facets = [{ scale: "x", auto: false }, { scale: "y", auto: false }];
  return {
    mode: 2,
    legend: { show: false },
    cursor: { show: false },
    scales: { x: { time: false, range: () => range }, y: { range: () => range } },
    axes: [axis(`coefficient of mode ${names[0]}`), axis(`coefficient of mode ${names[1]}`)],
    series: [null, { stroke: () => colour("series-1"), paths: trace, facets }],
  };
}

// The newest part is drawn last and strongest.
function trace(plot, index) {
  const [xs, ys] = plot.data[index];
  const { ctx } = plot;
  ctx.save();
  ctx.strokeStyle = colour("series-1");
  ctx.lineWidth = devicePixelRatio;
  const parts = 4;
  for (let p = 0; p < parts; p += 1) {
    const from = Math.max(0, Math.floor((p * xs.length) / parts) - 1);
    const to = Math.floor(((p + 1) * xs.length) / parts);
    ctx.globalAlpha = 0.2 + (0.8 * (p + 1)) / parts - 0.1;
    ctx.beginPath();
    for (let i = from; i < to; i += 1) {
      const [x, y] = [plot.valToPos(xs[i], "x", true), plot.valToPos(ys[i], "y", true)];
      if (i === from) ctx.moveTo(x, y); else ctx.lineTo(x, y);
    }
    ctx.stroke();
  }
  ctx.restore();
  return null;
}
