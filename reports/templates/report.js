"use strict";
(() => {
  // Tables: press a heading to sort by it, again to turn the order round.
  for (const table of document.querySelectorAll("table.sortable")) {
    const heads = [...table.tHead.rows[0].cells];
    heads.forEach((head, column) => {
      head.querySelector("button").addEventListener("click", () => {
        const turn = head.getAttribute("aria-sort") === "ascending" ? -1 : 1;
        heads.forEach((other) => other.removeAttribute("aria-sort"));
        head.setAttribute("aria-sort", turn === 1 ? "ascending" : "descending");
        const body = table.tBodies[0];
        const rows = [...body.rows];
        const numeric = rows.some((row) => row.cells[column].dataset.order !== "");
        const key = (row) => {
          const cell = row.cells[column];
          if (!numeric) return cell.textContent;
          return cell.dataset.order === "" ? null : Number(cell.dataset.order);
        };
        rows.sort((a, b) => {
          const [x, y] = [key(a), key(b)];
          if (x === null || y === null) return (x === null) - (y === null); // what has no value stays last
          return turn * (numeric ? x - y : x.localeCompare(y, undefined, { numeric: true }));
        });
        body.append(...rows);
      });
    });
  }

  // Paper has no buttons: what is folded up is printed open.
  addEventListener("beforeprint", () => document.querySelectorAll("details").forEach((one) => { one.open = true; }));

  const data = document.getElementById("curves-data");
  if (!data) return;
  const keys = JSON.parse(document.getElementById("curves-keys").textContent);
  const switches = [...document.querySelectorAll(".switch")];

  const prefixes = [[1e9, "G"], [1e6, "M"], [1e3, "k"], [1, ""], [1e-3, "m"], [1e-6, "µ"]];
  const hertz = (value) => {
    const [scale, prefix] = prefixes.find(([one]) => value >= one * (1 - 1e-9)) || prefixes.at(-1);
    return `${Number((value / scale).toPrecision(4))} ${prefix}Hz`;
  };

  // Ticks at round frequencies, however far the axis is enlarged and however narrow the screen is.
  const ticksOf = (low, high, room) => {
    const decades = Math.log10(high / low);
    if (decades < 0.5) {
      const step = 10 ** Math.floor(Math.log10((high - low) / 2));
      const fine = (high - low) / step > 8 ? step * 2 : step;
      const found = [];
      for (let i = Math.ceil(low / fine); i * fine <= high && found.length < 50; i++) found.push(i * fine);
      return found;
    }
    const steps = decades < 3 ? [1, 2, 5] : [1];
    const found = [];
    for (let d = Math.floor(Math.log10(low)); d <= Math.ceil(Math.log10(high)); d++) {
      for (const step of steps) {
        const tick = step * 10 ** d;
        if (tick >= low * (1 - 1e-9) && tick <= high * (1 + 1e-9)) found.push(tick);
      }
    }
    return found.length > room ? found.filter((tick, i) => i % Math.ceil(found.length / room) === 0) : found;
  };

  const show = (roots) => {
    const models = roots.flatMap((root) => [...root.references()]);
    const tagged = new Map();
    for (const model of models) {
      for (const tag of model.tags || []) tagged.set(tag, [...(tagged.get(tag) || []), model]);
    }
    const set = (tag, visible) => (tagged.get(tag) || []).forEach((model) => { model.visible = visible; });
    const update = () => {
      const hidden = new Set(
        switches.filter((one) => one.getAttribute("aria-pressed") === "false")
          .map((one) => JSON.stringify([one.dataset.group, one.dataset.name])));
      keys.forEach((own, i) => set(`curve-${i + 1}`, !own.some((key) => hidden.has(JSON.stringify(key)))));
      for (const one of switches) {
        if (one.dataset.overlay !== "0") set(`overlay-${one.dataset.overlay}`, one.getAttribute("aria-pressed") === "true");
      }
    };
    for (const one of switches) {
      one.addEventListener("click", () => {
        one.setAttribute("aria-pressed", String(one.getAttribute("aria-pressed") !== "true"));
        update();
      });
    }
    const axes = models.filter((model) => (model.name || "").startsWith("frequency-"));
    const range = models.find((model) => model.name === "panel-cmrr").x_range;
    const retick = () => {
      const room = Math.max(3, Math.floor(document.getElementById("plot").clientWidth / 62));
      const [low, high] = [Math.min(range.start, range.end), Math.max(range.start, range.end)];
      const ticks = ticksOf(low, high, room);
      for (const axis of axes) {
        axis.major_label_overrides = new Map(ticks.map((tick) => [tick, hertz(tick)]));
        axis.ticker.ticks = ticks;
      }
    };
    range.properties.start.change.connect(retick);
    range.properties.end.change.connect(retick);
    addEventListener("resize", retick);
    retick();
    const views = models.filter((model) => (model.name || "").startsWith("panel-"));
    const whole = views.flatMap((view) => [view.x_range, view.y_range]).map((one) => [one, one.start, one.end]);
    document.querySelector(".whole").addEventListener("click", () => {
      for (const [one, start, end] of whole) one.setv({ start, end });
    });
    // What lies under the pointer, within so many pixels, in the order in which it lies there.
    const near = 9, most = 9;
    const reading = document.getElementById("reading");
    let pointer = { x: 0, y: 0 };
    document.getElementById("plot").addEventListener("pointermove", (event) => { pointer = { x: event.clientX, y: event.clientY }; }, true);
    document.getElementById("plot").addEventListener("pointerdown", (event) => { pointer = { x: event.clientX, y: event.clientY }; }, true);
    document.getElementById("plot").addEventListener("pointerleave", () => { reading.hidden = true; });
    const nearest = (xs, x) => {
      let [low, high] = [0, xs.length - 1];
      while (high - low > 1) {
        const middle = (low + high) >> 1;
        if (xs[middle] > x) high = middle; else low = middle;
      }
      return Math.abs(Math.log(xs[high] / x)) < Math.abs(Math.log(xs[low] / x)) ? high : low;
    };
    const under = (panel, at) => {
      const found = [];
      const [across, up] = [panel.inner_width / Math.log(panel.x_range.end / panel.x_range.start), panel.inner_height / (panel.y_range.end - panel.y_range.start)];
      for (const one of panel.renderers) {
        const columns = one.data_source?.columns?.() || [];
        if (!one.name || !one.visible || !columns.includes("t")) continue;
        const [xs, ys] = ["x", one.glyph.y.field].map((name) => one.data_source.get_column(name));
        const i = nearest(xs, at.x);
        const j = xs[i] < at.x ? Math.min(i + 1, xs.length - 1) : Math.max(i - 1, 0);
        const share = i === j ? 0 : Math.log(at.x / xs[i]) / Math.log(xs[j] / xs[i]);
        const point = one.glyph.type !== "Line";
        const level = point || !Number.isFinite(ys[j]) ? ys[i] : ys[i] + share * (ys[j] - ys[i]);
        const away = point ? Math.hypot((level - at.y) * up, Math.log(xs[i] / at.x) * across) : Math.abs(level - at.y) * up;
        if (away <= near) found.push({ level, name: one.name, at: one.data_source.get_column("f")[i], text: one.data_source.get_column("t")[i] });
      }
      return found.sort((a, b) => b.level - a.level);
    };
    const read = (panel) => (at) => {
      const found = under(panel, at);
      reading.hidden = found.length === 0;
      if (reading.hidden) return;
      const lines = found.slice(0, most).map((one) => {
        const line = document.createElement("div");
        const name = document.createElement("b");
        name.textContent = one.name;
        line.append(name, one.at === found[0].at ? ` ${one.text}` : ` at ${one.at}: ${one.text}`);
        return line;
      });
      lines.unshift(`at ${found[0].at}`);
      if (found.length > most) lines.push(`and ${found.length - most} more`);
      reading.replaceChildren(...lines);
      const box = reading.getBoundingClientRect();
      const left = pointer.x + 16 + box.width < innerWidth ? pointer.x + 16 : Math.max(6, pointer.x - 16 - box.width);
      const top = Math.min(pointer.y + 14, innerHeight - box.height - 6);
      reading.style.transform = `translate(${left}px, ${top}px)`;
    };
    for (const panel of views) {
      panel.on_event("mousemove", read(panel));
      panel.on_event("tap", read(panel));
      panel.on_event("mouseleave", () => { reading.hidden = true; });
    }
    // On a touch screen a drag scrolls the page.
    if (matchMedia("(pointer: coarse)").matches) {
      models.filter((model) => model.type === "BoxZoomTool").forEach((tool) => { tool.active = false; });
    }
    document.documentElement.dataset.curves = "drawn";
  };

  window.Bokeh.embed.embed_item(JSON.parse(data.textContent), "plot").then((views) => {
    const all = Array.isArray(views) ? views : [...(views.roots || views)];
    show(all.map((view) => view.model));
  });
})();
