// Small helpers for building and changing the document. Text is always set as text, never parsed as markup.

const SVG = "http://www.w3.org/2000/svg";

export function h(tag, attributes = {}, ...children) {
  return filled(document.createElement(tag), attributes, children);
}

export function svg(tag, attributes = {}, ...children) {
  return filled(document.createElementNS(SVG, tag), attributes, children);
}

function filled(element, attributes, children) {
  for (const [name, value] of Object.entries(attributes)) {
    if (value === null || value === undefined || value === false) continue;
    if (typeof value === "function") element.addEventListener(name, value);
    else element.setAttribute(name, value === true ? "" : value);
  }
  element.append(...children.flat().filter((child) => child !== null && child !== undefined));
  return element;
}

// Change a text only when it differs, so that screen readers and selections are left alone.
export function say(element, text) {
  if (element.textContent !== text) element.textContent = text;
}

export function table(caption, headings, rows, kind = "") {
  return h("table", { class: kind },
    h("caption", {}, caption),
    h("thead", {}, h("tr", {}, headings.map((text) => h("th", { scope: "col" }, text)))),
    h("tbody", {}, rows.map((cells) => h("tr", {}, cells.map((cell, k) =>
      (k === 0 ? h("th", { scope: "row" }, cell) : h("td", {}, cell)))))));
}

// What may be wider than a phone scrolls by itself, with the keyboard too.
export function wide(name, element) {
  return h("div", { class: "wide", role: "region", "aria-label": name, tabindex: "0" }, element);
}

// The level of the water: flat when slack, waves while it moves; the shape says what the colour says.
const GAUGES = {
  settled: ["M2 12h20"],
  unsettled: ["M2 12c2.5-6 5-6 7.5 0s5 6 7.5 0 3.5-6 5-4"],
  gathering: ["M3 12h.01M9 12h.01M15 12h.01M21 12h.01"],
  drifting: ["M2 18c3-5 5-2 8-6s6-2 12-7"],
  inseparable: ["M2 9c5-5 7 7 20 0", "M2 15c5 5 7-7 20 0"],
  failed: ["M5 5l14 14M19 5L5 19"],
};

export function gauge(state) {
  const lines = (GAUGES[state] || GAUGES.gathering).map((d) => svg("path", { d }));
  return svg("svg", { class: `gauge ${state}`, viewBox: "0 0 24 24", "aria-hidden": "true" }, lines);
}
