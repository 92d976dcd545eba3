"use strict";
(() => {
  const NAME_GAP = 14; // pixels between neighbouring names
  const MODELS = ["energy", "log", "linear", "parts of log", "parts of linear", "channels", "names", "leaders", "guides"];
  const all = (selector, root = document) => [...root.querySelectorAll(selector)];

  // Positions in rising order, moved as little as possible until they are `gap` apart (pool adjacent violators).
  function spread(wanted, gap, low, high) {
    const blocks = [];
    wanted.forEach((value, i) => {
      let mean = value - i * gap, size = 1;
      while (blocks.length && blocks[blocks.length - 1].mean > mean) {
        const before = blocks.pop();
        mean = (mean * size + before.mean * before.size) / (size + before.size);
        size += before.size;
      }
      blocks.push({ mean, size });
    });
    const last = high - gap * (wanted.length - 1);
    return blocks.flatMap((b) => Array(b.size).fill(b.mean)).map((v, i) => Math.min(Math.max(v, low), last) + i * gap);
  }

  function placeNames(models, marks, from, to) {
    const width = models.log.inner_width || models.linear.inner_width || 600;
    const gap = (NAME_GAP * (to - from)) / width;
    const room = Math.max(1, Math.floor(width / (1.6 * NAME_GAP)));
    const inside = marks.filter((m) => m.energy > from && m.energy < to);
    const shown = [...inside].sort((a, b) => a.rank - b.rank).slice(0, room).sort((a, b) => a.energy - b.energy);
    const at = spread(shown.map((m) => m.energy), gap, from + gap / 2, to - gap / 2);
    models.names.data = { x: at, text: shown.map((m) => m.text), colour: shown.map((m) => m.colour) };
    models.guides.data = { energy: shown.map((m) => m.energy) };
    models.leaders.data = { xs: shown.map((m, i) => [m.energy, at[i], at[i]]), ys: shown.map(() => [0, 0.13, 0.17]) };
  }

  // The counts axis follows the highest counts in view.
  function fitCounts(models, energy, counts, from, to) {
    let top = 1;
    for (let i = 0; i < energy.length; i++) {
      if (energy[i] >= from && energy[i] <= to && counts[i] > top) top = counts[i];
    }
    models.log.y_range.end = Math.max(10, 1.8 * top);
    models.linear.y_range.end = 1.08 * top;
  }

  function controls(models, whole) {
    const range = models.energy;
    const show = (from, to) => {
      const width = Math.min(Math.max(to - from, 0.2), whole[1] - whole[0]);
      const start = Math.min(Math.max((from + to - width) / 2, whole[0]), whole[1] - width);
      range.setv({ start, end: start + width });
    };
    all("[data-scale]").forEach((button) => button.addEventListener("click", () => {
      all("[data-scale]").forEach((b) => b.setAttribute("aria-pressed", String(b === button)));
      models.log.visible = button.dataset.scale === "log";
      models.linear.visible = !models.log.visible;
    }));
    all("[data-parts]").forEach((button) => button.addEventListener("click", () => {
      const shown = button.getAttribute("aria-pressed") !== "true";
      button.setAttribute("aria-pressed", String(shown));
      for (const scale of ["log", "linear"]) models[`parts of ${scale}`].visible = shown;
    }));
    all("[data-zoom]").forEach((button) => button.addEventListener("click", () => {
      const middle = (range.start + range.end) / 2, half = ((range.end - range.start) / 2) * Number(button.dataset.zoom);
      show(middle - half, middle + half);
    }));
    all("[data-move]").forEach((button) => button.addEventListener("click", () => {
      const step = (range.end - range.start) * Number(button.dataset.move);
      show(range.start + step, range.end + step);
    }));
    all("[data-whole]").forEach((button) => button.addEventListener("click", () => show(...whole)));
    all("button.show").forEach((button) => {
      button.hidden = false;
      button.addEventListener("click", () => {
        show(Number(button.dataset.from), Number(button.dataset.to));
        document.getElementById("spectrum").scrollIntoView();
      });
    });
    all(".controls").forEach((bar) => { bar.hidden = false; });
  }

  async function draw() {
    const holder = document.getElementById("data");
    if (!holder) return;
    const data = JSON.parse(holder.textContent);
    document.body.classList.add("drawn");
    await Bokeh.embed.embed_item(data.plot);
    const page = Bokeh.documents[0];
    const models = {};
    for (const name of MODELS) models[name] = page.get_model_by_name(name);
    const whole = [models.energy.start, models.energy.end];
    const energy = models.channels.get_array("energy"), counts = models.channels.get_array("counts");
    let waiting = false;
    const update = () => {
      waiting = false;
      placeNames(models, data.marks, models.energy.start, models.energy.end);
      fitCounts(models, energy, counts, models.energy.start, models.energy.end);
    };
    const later = () => { if (!waiting) { waiting = true; requestAnimationFrame(update); } };
    models.energy.change.connect(later);
    for (const plot of [models.log, models.linear]) {
      plot.properties.inner_width.change.connect(later);
      // on a touch screen a drag scrolls the page; zooming is done with the buttons
      if (matchMedia("(pointer: coarse)").matches) plot.toolbar.active_drag = null;
    }
    controls(models, whole);
    update();
    document.body.dataset.ready = "true";
  }

  function sortable(table) {
    const heads = all("th", table), body = table.tBodies[0];
    const value = (row, i) => {
      const cell = row.cells[i];
      return cell.dataset.value === undefined ? cell.textContent : cell.dataset.value === "" ? Infinity : Number(cell.dataset.value);
    };
    heads.forEach((head, i) => head.querySelector("button").addEventListener("click", () => {
      const sign = head.getAttribute("aria-sort") === "ascending" ? -1 : 1;
      heads.forEach((h) => h.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", sign > 0 ? "ascending" : "descending");
      const order = (a, b) => (typeof a === "number" ? a - b : a.localeCompare(b));
      body.append(...[...body.rows].sort((a, b) => sign * order(value(a, i), value(b, i))));
    }));
  }

  all("table.sortable").forEach(sortable);
  addEventListener("beforeprint", () => all(".findings details").forEach((d) => { d.open = true; }));
  draw();
})();
