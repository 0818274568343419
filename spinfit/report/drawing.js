"use strict";
// What the scripts of pages share: elements of drawings, and round numbers for their axes.
const drawing = (() => {
  const SPACE = "http://www.w3.org/2000/svg";
  const make = (name, attributes, text) => {
    const element = document.createElementNS(SPACE, name);
    for (const [key, value] of Object.entries(attributes)) element.setAttribute(key, value);
    if (text !== undefined) element.textContent = text;
    return element;
  };
  const decimals = (step) => {
    let count = 0;
    while (count < 9 && Math.abs(step - Number(step.toFixed(count))) > 1e-6 * step) count += 1;
    return count;
  };
  const written = (value, step) => {
    if (step >= 1e5 || step < 1e-7) return value.toPrecision(4).replace("-", "\u2212");
    const text = value.toFixed(decimals(step));
    return Number(text) === 0 ? "0" : text.replace("-", "\u2212");
  };
  // Return [value, text] of round numbers between two ends.
  const ticks = (low, high, most) => {
    if (!(high > low)) return [];
    const rough = (high - low) / most, power = 10 ** Math.floor(Math.log10(rough));
    const step = power * [1, 2, 2.5, 5, 10].find((k) => k * power >= rough * (1 - 1e-9));
    const found = [];
    for (let n = Math.ceil(low / step - 1e-9); n * step <= high + 1e-9 * step; n += 1) found.push(n * step);
    return found.map((value) => [value, written(value, step)]);
  };
  // Return where a panel's frame stands and what its axes span.
  const panel = (group) => {
    const frame = group.querySelector("rect.frame");
    const [left, top, width, height] = ["x", "y", "width", "height"].map((key) => Number(frame.getAttribute(key)));
    const [x, y] = [group.dataset.x, group.dataset.y].map((text) => text.trim().split(/\s+/).map(Number));
    return { group, curves: group.querySelector("svg.curves"), left, top, width, height, x, y };
  };
  // Put ticks below a panel.
  const below = (one, group, [low, high], most, labels = true) => {
    group.replaceChildren();
    for (const [value, text] of ticks(low, high, most)) {
      const at = one.left + (value - low) / (high - low) * one.width, edge = one.top + one.height;
      group.append(make("path", { d: `M${at} ${edge}v-5` }));
      if (labels) group.append(make("text", { x: at, y: edge + 16, "text-anchor": "middle" }, text));
    }
  };
  return { make, ticks, panel, below };
})();
