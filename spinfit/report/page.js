"use strict";
// Legends that hide curves, and ranges that are magnified.  Without this script the page is whole, only still.
(() => {
  const { make, ticks, panel, below } = drawing;

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
    const picture = figure.querySelector("svg.drawing[data-field]");
    if (!picture) return;
    const constant = Number(picture.dataset.field);
    const panels = [...picture.querySelectorAll("g.panel")].map((group) => {
      const one = panel(group);
      return { ...one, nowX: one.x, nowY: one.y };
    });

    function show(one) {
      const { x, y, nowX, nowY, left, top, width, height } = one;
      const across = (value) => (value - x[0]) / (x[1] - x[0]) * width;
      const down = (value) => (y[1] - value) / (y[1] - y[0]) * height;
      const box = [across(nowX[0]), down(nowY[1]), across(nowX[1]) - across(nowX[0]), down(nowY[0]) - down(nowY[1])];
      one.curves.setAttribute("viewBox", box.join(" "));
      for (const group of one.group.querySelectorAll("g.ticks")) {
        const kind = group.dataset.axis;
        if (kind === "x" || kind === "bare") { below(one, group, nowX, 7, kind === "x"); continue; }
        group.replaceChildren();
        const places = kind === "top" ? topTicks(nowX[0], nowX[1], constant) : ticks(nowY[0], nowY[1], 5);
        for (const [value, text] of places) {
          if (kind === "top") {
            const at = left + (value - nowX[0]) / (nowX[1] - nowX[0]) * width;
            group.append(make("path", { d: `M${at} ${top}v5` }));
            group.append(make("text", { x: at, y: top - 7, "text-anchor": "middle" }, text));
          } else {
            const at = top + (nowY[1] - value) / (nowY[1] - nowY[0]) * height;
            group.append(make("path", { d: `M${left} ${at}h5` }));
            group.append(make("text", { x: left - 6, y: at + 4, "text-anchor": "end" }, text));
          }
        }
      }
    }

    const whole = document.createElement("button"), hint = document.createElement("span");
    whole.type = "button";
    whole.textContent = "whole sweep";
    whole.hidden = true;
    hint.className = "quiet hint";
    const advice = "drag over a part to magnify it; choose a name to hide its curve";
    hint.textContent = advice;
    figure.querySelector(".legend").append(hint, whole);
    const reset = () => {
      for (const one of panels) { one.nowX = one.x; one.nowY = one.y; show(one); }
      whole.hidden = true;
    };
    whole.addEventListener("click", reset);
    picture.addEventListener("dblclick", reset);

    let begun = null;
    const place = (event) => new DOMPoint(event.clientX, event.clientY).matrixTransform(picture.getScreenCTM().inverse());
    picture.addEventListener("pointerdown", (event) => {
      if (event.pointerType === "touch" || event.button !== 0) return;
      const at = place(event);
      const within = panels.find((one) => at.x >= one.left && at.x <= one.left + one.width && at.y >= one.top && at.y <= one.top + one.height);
      if (!within) return;
      event.preventDefault();
      const box = make("rect", { class: "select" });
      picture.append(box);
      begun = { one: within, at, box };
      picture.setPointerCapture(event.pointerId);
    });
    const bounds = (event) => {
      const { one, at } = begun, now = place(event);
      const kept = (value, low, size) => Math.min(Math.max(value, low), low + size);
      const [a, b] = [at.x, kept(now.x, one.left, one.width)].sort((p, q) => p - q);
      let [c, d] = [at.y, kept(now.y, one.top, one.height)].sort((p, q) => p - q);
      const tall = d - c > 0.15 * one.height;  // else the whole height is meant
      if (!tall) [c, d] = [one.top, one.top + one.height];
      return { a, b, c, d, tall };
    };
    // Field and g under the pointer, with as many digits as a unit of the drawing is worth.
    const under = (event) => {
      const at = place(event);
      const one = panels.find((each) => at.x >= each.left && at.x <= each.left + each.width);
      if (!one || at.y < panels[0].top || at.y > picture.viewBox.baseVal.height - 40) return advice;
      const [low, high] = one.nowX, field = low + (at.x - one.left) / one.width * (high - low);
      const fine = Math.max(0, Math.min(6, Math.ceil(-Math.log10((high - low) / one.width))));
      const g = constant / field, finer = Math.max(0, Math.min(6, Math.ceil(-Math.log10(Math.abs(g / field) * (high - low) / one.width))));
      return `${field.toFixed(fine)} mT` + (field > 0 ? `, g ${g.toFixed(finer)}` : "");
    };
    picture.addEventListener("pointerleave", () => { hint.textContent = advice; });
    picture.addEventListener("pointermove", (event) => {
      hint.textContent = under(event);
      if (!begun) return;
      const { a, b, c, d } = bounds(event);
      for (const [key, value] of Object.entries({ x: a, y: c, width: b - a, height: d - c })) begun.box.setAttribute(key, value);
    });
    picture.addEventListener("pointerup", (event) => {
      if (!begun) return;
      const { one, box } = begun, { a, b, c, d, tall } = bounds(event);
      box.remove();
      begun = null;
      if (b - a < 6) return;
      const old = one.nowX, part = (value) => old[0] + (value - one.left) / one.width * (old[1] - old[0]);
      const chosen = [part(a), part(b)];
      if (chosen[1] - chosen[0] < 1e-5 * (one.x[1] - one.x[0])) return;
      if (tall) {
        const high = one.nowY[1], reach = (high - one.nowY[0]) / one.height;
        one.nowY = [high - (d - one.top) * reach, high - (c - one.top) * reach];
      }
      for (const each of panels) { each.nowX = chosen; show(each); }
      whole.hidden = false;
    });
    picture.addEventListener("pointercancel", () => { if (begun) { begun.box.remove(); begun = null; } });
  }

  for (const figure of document.querySelectorAll("figure.fit")) {
    for (const key of figure.querySelectorAll(".key[data-curve]")) hide(key, figure);
    magnify(figure);
  }
})();
