"use strict";
// Legends that hide curves, and ranges that are magnified.  Without this script the page is whole, only still.
(() => {
  const SPACE = "http://www.w3.org/2000/svg";
  const numbers = (text) => text.trim().split(/\s+/).map(Number);
  const make = (name, attributes, text) => {
    const element = document.createElementNS(SPACE, name);
    for (const [key, value] of Object.entries(attributes)) element.setAttribute(key, value);
    if (text !== undefined) element.textContent = text;
    return element;
  };

  function hide(key, figure) {
    key.setAttribute("role", "button");
    key.setAttribute("tabindex", "0");
    key.setAttribute("aria-pressed", "true");
    const turn = () => {
      const off = key.classList.toggle("off");
      key.setAttribute("aria-pressed", String(!off));
      for (const curve of figure.querySelectorAll("path[data-curve]")) {
        if (curve.dataset.curve === key.dataset.curve) curve.classList.toggle("hidden", off);
      }
    };
    key.addEventListener("click", turn);
    key.addEventListener("keydown", (event) => {
      if (event.key === "Enter" || event.key === " ") { event.preventDefault(); turn(); }
    });
  }

  const decimals = (step) => {
    let count = 0;
    while (count < 9 && Math.abs(step - Number(step.toFixed(count))) > 1e-6 * step) count += 1;
    return count;
  };
  const written = (value, step) => {
    const text = value.toFixed(decimals(step));
    return Number(text) === 0 ? "0" : text.replace("-", "\u2212");
  };
  function ticks(low, high, most) {
    const rough = (high - low) / most, power = 10 ** Math.floor(Math.log10(rough));
    const step = power * [1, 2, 2.5, 5, 10].find((k) => k * power >= rough * (1 - 1e-9));
    const found = [];
    for (let n = Math.ceil(low / step - 1e-9); n * step <= high + 1e-9 * step; n += 1) found.push(n * step);
    return found.map((value) => [value, written(value, step)]);
  }
  const ROUND = [2, 4, 1, 6, 3, 10, 20, 5, 8, 15, 50, 100, 1.5, 2.5, 1.2, 30, 0.5, 1.7, 0.7, 2.2, 3.5, 1.4, 1.1, 0.2, 0.1];
  // g at a field B is constant / B.
  function topTicks(low, high, constant) {
    const first = Math.max(low, 0.02 * high);
    if (!(high > first)) return [];
    const least = constant / high, largest = constant / first;
    if (largest / least < 1.8) return ticks(least, largest, 6).map(([g, text]) => [constant / g, text]);
    const taken = [];
    for (const g of ROUND) {
      const at = constant / g;
      if (g >= least && g <= largest && taken.every(([other]) => Math.abs(at - other) > (high - low) / 14)) taken.push([at, String(g)]);
    }
    return taken;
  }

  function magnify(figure) {
    const drawing = figure.querySelector("svg.drawing[data-field]");
    if (!drawing) return;
    const constant = Number(drawing.dataset.field);
    const panels = [...drawing.querySelectorAll("g.panel")].map((group) => {
      const frame = group.querySelector("rect.frame"), curves = group.querySelector("svg.curves");
      const [left, top, width, height] = ["x", "y", "width", "height"].map((key) => Number(frame.getAttribute(key)));
      const x = numbers(group.dataset.x), y = numbers(group.dataset.y);
      return { group, curves, left, top, width, height, x, y, nowX: x, nowY: y };
    });

    function show(panel) {
      const { x, y, nowX, nowY, width, height } = panel;
      const across = (value) => (value - x[0]) / (x[1] - x[0]) * width, down = (value) => (y[1] - value) / (y[1] - y[0]) * height;
      const box = [across(nowX[0]), down(nowY[1]), across(nowX[1]) - across(nowX[0]), down(nowY[0]) - down(nowY[1])];
      panel.curves.setAttribute("viewBox", box.join(" "));
      for (const group of panel.group.querySelectorAll("g.ticks")) {
        const kind = group.dataset.axis;
        group.replaceChildren();
        if (kind === "y") {
          for (const [value, text] of ticks(nowY[0], nowY[1], 5)) {
            const at = panel.top + (nowY[1] - value) / (nowY[1] - nowY[0]) * height;
            group.append(make("path", { d: `M${panel.left} ${at}h5` }), make("text", { x: panel.left - 6, y: at + 4, "text-anchor": "end" }, text));
          }
          continue;
        }
        const places = kind === "top" ? topTicks(nowX[0], nowX[1], constant) : ticks(nowX[0], nowX[1], 7);
        for (const [value, text] of places) {
          const at = panel.left + (value - nowX[0]) / (nowX[1] - nowX[0]) * width;
          const edge = kind === "top" ? panel.top : panel.top + height;
          group.append(make("path", { d: `M${at} ${edge}v${kind === "top" ? 5 : -5}` }));
          if (kind !== "bare") group.append(make("text", { x: at, y: kind === "top" ? edge - 7 : edge + 16, "text-anchor": "middle" }, text));
        }
      }
    }

    const whole = document.createElement("button"), hint = document.createElement("span");
    whole.type = "button";
    whole.textContent = "whole sweep";
    whole.hidden = true;
    hint.className = "quiet hint";
    hint.textContent = "drag over a part to magnify it; choose a name to hide its curve";
    figure.querySelector(".legend").append(hint, whole);
    const reset = () => {
      for (const panel of panels) { panel.nowX = panel.x; panel.nowY = panel.y; show(panel); }
      whole.hidden = true;
    };
    whole.addEventListener("click", reset);
    drawing.addEventListener("dblclick", reset);

    let begun = null;
    const place = (event) => new DOMPoint(event.clientX, event.clientY).matrixTransform(drawing.getScreenCTM().inverse());
    drawing.addEventListener("pointerdown", (event) => {
      if (event.pointerType === "touch" || event.button !== 0) return;
      const at = place(event);
      const panel = panels.find((one) => at.x >= one.left && at.x <= one.left + one.width && at.y >= one.top && at.y <= one.top + one.height);
      if (!panel) return;
      event.preventDefault();
      const box = make("rect", { class: "select" });
      drawing.append(box);
      begun = { panel, at, box };
      drawing.setPointerCapture(event.pointerId);
    });
    const bounds = (event) => {
      const { panel, at } = begun, now = place(event);
      const within = (value, low, size) => Math.min(Math.max(value, low), low + size);
      const [a, b] = [at.x, within(now.x, panel.left, panel.width)].sort((p, q) => p - q);
      let [c, d] = [at.y, within(now.y, panel.top, panel.height)].sort((p, q) => p - q);
      const tall = d - c > 0.15 * panel.height;  // else the whole height is meant
      if (!tall) [c, d] = [panel.top, panel.top + panel.height];
      return { a, b, c, d, tall };
    };
    drawing.addEventListener("pointermove", (event) => {
      if (!begun) return;
      const { a, b, c, d } = bounds(event);
      for (const [key, value] of Object.entries({ x: a, y: c, width: b - a, height: d - c })) begun.box.setAttribute(key, value);
    });
    drawing.addEventListener("pointerup", (event) => {
      if (!begun) return;
      const { panel, box } = begun, { a, b, c, d, tall } = bounds(event);
      box.remove();
      begun = null;
      if (b - a < 6) return;
      const old = panel.nowX, part = (value) => old[0] + (value - panel.left) / panel.width * (old[1] - old[0]);
      const chosen = [part(a), part(b)];
      if (chosen[1] - chosen[0] < 1e-5 * (panel.x[1] - panel.x[0])) return;
      if (tall) {
        const high = panel.nowY[1], reach = (high - panel.nowY[0]) / panel.height;
        panel.nowY = [high - (d - panel.top) * reach, high - (c - panel.top) * reach];
      }
      for (const one of panels) { one.nowX = chosen; show(one); }
      whole.hidden = false;
    });
    drawing.addEventListener("pointercancel", () => { if (begun) { begun.box.remove(); begun = null; } });
  }

  for (const figure of document.querySelectorAll("figure.fit")) {
    for (const key of figure.querySelectorAll(".key[data-curve]")) hide(key, figure);
    magnify(figure);
  }
})();
