"use strict";
// The table of a batch: sorted by a click on a heading, filtered, and drawn against the column of choice.
(() => {
  const { make, panel, below } = drawing;
  const table = document.querySelector("table.rows");
  if (!table) return;
  const body = table.tBodies[0], heads = [...table.tHead.rows[0].cells], rows = [...body.rows];
  const number = (row, k) => {
    const text = row.cells[k].dataset.v;
    return text === undefined || text === "" ? NaN : Number(text);
  };

  // Of a long table only so many rows are laid out at a time: browsers are slow with more.
  const PAGE = 500;
  const tools = document.querySelector(".tools"), wanted = document.createElement("input");
  const count = document.createElement("span"), more = document.createElement("button");
  let order = rows, limit = PAGE, plain = null;
  const show = () => {
    const words = wanted.value.toLowerCase().split(/\s+/).filter(Boolean);
    if (words.length && !plain) plain = new Map(rows.map((row) => [row, `${row.textContent} ${row.dataset.kind}`.toLowerCase()]));
    const found = words.length ? order.filter((row) => words.every((word) => plain.get(row).includes(word))) : order;
    body.replaceChildren(...found.slice(0, limit));
    more.hidden = found.length <= limit;
    const shown = Math.min(found.length, limit), part = shown < found.length ? `the first ${shown} of ` : "";
    count.textContent = words.length ? `${part}${found.length} of ${rows.length} rows` : `${part}${rows.length} rows; a heading sorts`;
  };
  wanted.type = "search";
  wanted.placeholder = "show rows with these words";
  wanted.setAttribute("aria-label", wanted.placeholder);
  count.className = "quiet";
  more.type = "button";
  more.textContent = `show ${PAGE} more`;
  more.addEventListener("click", () => { limit += PAGE; show(); });
  let waiting = 0;
  const search = () => { limit = PAGE; show(); };
  wanted.addEventListener("input", () => { clearTimeout(waiting); waiting = setTimeout(search, 150); });
  wanted.addEventListener("change", search);
  tools.append(wanted, count, more);
  show();

  // Sorting: numbers by value, what is missing last, texts as people sort them.
  const words = new Intl.Collator("en", { numeric: true });
  heads.forEach((head, k) => {
    const numeric = head.dataset.kind === "number";
    const sort = () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      for (const other of heads) other.removeAttribute("aria-sort");
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      const sign = down ? -1 : 1;
      const keyed = rows.map((row) => [numeric ? number(row, k) : row.cells[k].textContent, row]);
      keyed.sort(([a], [b]) => {
        if (!numeric) return sign * words.compare(a, b);
        if (Number.isNaN(a) || Number.isNaN(b)) return Number.isNaN(a) - Number.isNaN(b);
        return sign * (a - b);
      });
      order = keyed.map(([, row]) => row);
      limit = PAGE;
      show();
    };
    head.setAttribute("role", "button");
    head.setAttribute("tabindex", "0");
    head.addEventListener("click", sort);
    head.addEventListener("keydown", (event) => {
      if (event.key === "Enter" || event.key === " ") { event.preventDefault(); sort(); }
    });
  });

  // Trends: every parameter against one column.
  const trends = [...document.querySelectorAll("svg.trend")];
  const chooser = document.querySelector(".against");
  if (!trends.length || !chooser) return;
  const kind = (row, k) => {
    if (row.dataset.kind === "bad") return "bad";
    return row.cells[k].classList.contains("out") ? "outlier" : "good";
  };
  const near = document.createElement("span");
  near.className = "quiet near";
  const drawn = new Map();
  function draw(picture, across) {
    const one = panel(picture.querySelector("g.panel")), k = Number(picture.dataset.column);
    const points = rows.map((row, n) => [across === -1 ? n + 1 : number(row, across), number(row, k), row]);
    const known = points.filter(([x, y]) => Number.isFinite(x) && Number.isFinite(y));
    let low = Infinity, high = -Infinity;
    for (const [x] of known) { low = Math.min(low, x); high = Math.max(high, x); }
    if (!known.length) [low, high] = [0, 1];
    const room = 0.04 * (high - low) || 0.05 * Math.abs(high) || 1;
    [low, high] = [low - room, high + room];
    const inside = (y) => Math.min(Math.max(y, 0), one.height);
    const place = (y) => inside((one.y[1] - y) / (one.y[1] - one.y[0]) * one.height);
    const paths = { good: ["", ""], outlier: ["", ""], bad: ["", ""] };
    drawn.set(picture, known.map(([x, y, row]) => {
      const a = (x - low) / (high - low) * one.width, b = place(y), words = paths[kind(row, k)];
      words[0] += `M${a.toFixed(2)} ${b.toFixed(2)}h0`;
      const sigma = Number(row.cells[k].dataset.u);
      if (sigma > 0) words[1] += `M${a.toFixed(2)} ${place(y - sigma).toFixed(2)}V${place(y + sigma).toFixed(2)}`;
      return [one.left + a, one.top + b, row];
    }));
    const path = (name) => picture.querySelector(`path[data-curve="${name}"]`);
    for (const [name, [dots, bars]] of Object.entries(paths)) {
      if (path(name)) path(name).setAttribute("d", dots);
      if (path(`${name} bars`)) path(`${name} bars`).setAttribute("d", bars);
    }
    below(one, one.group.querySelector('g.ticks[data-axis="x"]'), [low, high], 4);
    picture.querySelector("text.below").textContent = across === -1 ? "row of the table" : heads[across].dataset.title;
  }
  const select = document.createElement("select");
  select.setAttribute("aria-label", "draw against");
  select.append(new Option("row of the table", "-1"));
  heads.forEach((head, k) => { if (head.dataset.kind === "number") select.append(new Option(head.dataset.title, String(k))); });
  select.value = chooser.dataset.column;
  select.addEventListener("change", () => trends.forEach((picture) => draw(picture, Number(select.value))));
  chooser.append("Against ", select, near);
  for (const picture of trends) {
    draw(picture, Number(select.value));
    const mark = make("circle", { class: "mark hidden", r: 6 });
    picture.append(mark);
    picture.addEventListener("pointermove", (event) => {
      const at = new DOMPoint(event.clientX, event.clientY).matrixTransform(picture.getScreenCTM().inverse());
      let best = null, least = 15;
      for (const [x, y, row] of drawn.get(picture)) {
        const distance = Math.hypot(x - at.x, y - at.y);
        if (distance < least) [best, least] = [[x, y, row], distance];
      }
      mark.classList.toggle("hidden", !best);
      near.textContent = best ? ` ${best[2].cells[0].textContent}` : "";
      if (best) { mark.setAttribute("cx", best[0]); mark.setAttribute("cy", best[1]); }
    });
  }
})();
