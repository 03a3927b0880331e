/* Fetches a plot, hands it to BokehJS, and drives it from buttons and keys of our own.
 *
 * The stage element gets a property `labPlot` and sends two events that bubble:
 *   lab:plot  a (new) plot stands
 *   lab:view  its range or its size changed
 * labPlot = {xRange, frame() -> {left, top, width, height} in pixels of .plot-area, xOf(cm1), yOf(value), bands, show, zoomTo(high, low)}
 */
(() => {
  "use strict";

  const NARROW = window.matchMedia("screen and (max-width: 720px)");
  const LEFT_WIDE = 156;
  const LEFT_NARROW = 56;

  function start(stage) {
    const area = stage.querySelector(".plot-area");
    const canvas = stage.querySelector(".plot-canvas");
    const wait = stage.querySelector(".plot-wait");
    let turn = 0;
    let views = null;
    let plots = [];
    let whole = null;

    const say = (type) => stage.dispatchEvent(new CustomEvent(type, { bubbles: true }));
    const chosen = (name) => [...stage.querySelectorAll(`input[name="${name}"]:checked`)].map((input) => input.value);

    function address() {
      const url = new URL(stage.dataset.plotUrl, window.location.href);
      url.searchParams.set("show", chosen("show")[0] || "absorbance");
      url.searchParams.delete("overlay");
      chosen("overlay").forEach((name) => url.searchParams.append("overlay", name));
      return url;
    }

    async function load() {
      const mine = ++turn;
      stage.setAttribute("aria-busy", "true");
      try {
        const answer = await fetch(address(), { headers: { Accept: "application/json" }, credentials: "same-origin" });
        if (!answer.ok) throw new Error(`the server answered ${answer.status}`);
        const item = await answer.json();
        await document.fonts.load('12px "Lab Inter"');
        if (mine !== turn) return;
        const kept = plots.length ? { start: plots[0].model.x_range.start, end: plots[0].model.x_range.end } : null;
        if (views) views.clear();
        canvas.replaceChildren();
        views = await window.Bokeh.embed.embed_item(item, canvas.id);
        if (mine !== turn) return;
        settle(kept);
        wait.hidden = true;
      } catch (problem) {
        if (mine !== turn) return;
        wait.hidden = false;
        wait.textContent = `The plot could not be drawn: ${problem.message}. The bands stand in the table.`;
      } finally {
        if (mine === turn) stage.removeAttribute("aria-busy");
      }
    }

    function settle(kept) {
      plots = [...views.all_views()].filter((view) => view.model.type === "Figure").map((view) => ({ model: view.model, view }));
      const main = plots.find((plot) => plot.model.name === "spectrum");
      plots = [main, ...plots.filter((plot) => plot !== main)];
      const x = main.model.x_range;
      whole = { start: x.start, end: x.end, y: plots.map(({ model }) => [model.y_range.start, model.y_range.end]) };
      fitBorders();
      unstop(canvas);
      useTool(stage.querySelector('[data-plot-do="pan"][aria-pressed="true"]') ? "pan" : "box");
      const source = (name) => main.model.renderers.map((r) => r.data_source).find((s) => s && s.name === name);
      const bands = source("bands").data;
      stage.labPlot = {
        xRange: x,
        show: main.model.tags[0],
        bands: Array.from(bands.key, (key, i) => ({ key, x: bands.x[i], y: bands.y[i], height: bands.height[i], width: bands.width[i], shape: bands.shape[i], intensity: bands.intensity[i] })),
        frame: () => frameOf(main.view),
        xOf: (cm1) => frameOf(main.view).left + ((x.start - cm1) / (x.start - x.end)) * frameOf(main.view).width,
        yOf: (value) => {
          const y = main.model.y_range;
          const frame = frameOf(main.view);
          return frame.top + ((y.end - value) / (y.end - y.start)) * frame.height;
        },
        zoomTo: (high, low) => { moveTo(high, low); },
        trace: source("trace").data,
      };
      let asked = false;
      const changed = () => {
        if (asked) return;
        asked = true;
        window.requestAnimationFrame(() => { asked = false; say("lab:view"); });
      };
      [x, main.model.y_range].forEach((range) => {
        range.properties.start.change.connect(changed);
        range.properties.end.change.connect(changed);
      });
      if (kept && (kept.start !== x.start || kept.end !== x.end)) moveTo(kept.start, kept.end);
      window.requestAnimationFrame(() => window.requestAnimationFrame(() => { say("lab:plot"); say("lab:view"); }));
    }

    /* The plot area itself is the stop for the keyboard; BokehJS adds one of its own for each figure. */
    function unstop(node) {
      node.querySelectorAll("*").forEach((element) => {
        if (element.tabIndex >= 0) element.tabIndex = -1;
        if (element.shadowRoot) unstop(element.shadowRoot);
      });
    }

    function frameOf(view) {
      const box = view.frame.bbox;
      const figure = view.el.getBoundingClientRect();
      const origin = area.getBoundingClientRect();
      return { left: figure.left - origin.left + box.left, top: figure.top - origin.top + box.top, width: box.width, height: box.height };
    }

    function fitBorders() {
      plots.forEach(({ model }) => {
        model.min_border_left = NARROW.matches ? LEFT_NARROW : LEFT_WIDE;
        model.min_border_right = NARROW.matches ? 8 : 18;
        model.below[0].ticker.desired_num_ticks = NARROW.matches ? 4 : 9;
      });
    }

    /* Moves the axis, inside what was measured, and fits the ordinate to what is then seen. */
    function moveTo(high, low) {
      const x = plots[0].model.x_range;
      const span = Math.min(Math.max(high - low, 8), whole.start - whole.end);
      let from = (high + low + span) / 2;
      from = Math.min(Math.max(from, whole.end + span), whole.start);
      x.setv({ start: from, end: from - span });
      if (from === whole.start && from - span <= whole.end) {
        plots.forEach(({ model }, i) => model.y_range.setv({ start: whole.y[i][0], end: whole.y[i][1] }));
      } else {
        plots.forEach(({ model }) => fitOrdinate(model, from, from - span));
      }
    }

    function fitOrdinate(model, high, low) {
      let bottom = Infinity;
      let top = -Infinity;
      model.renderers.filter((r) => r.glyph && r.glyph.type === "Line").forEach((renderer) => {
        const xs = renderer.data_source.data.x;
        const ys = renderer.data_source.data[renderer.glyph.y.field];
        for (let i = 0; i < xs.length; i += 1) {
          if (xs[i] < low || xs[i] > high || !Number.isFinite(ys[i])) continue;
          if (ys[i] < bottom) bottom = ys[i];
          if (ys[i] > top) top = ys[i];
        }
      });
      if (!(top > bottom)) return;
      const room = top - bottom;
      const under = model.tags[0] === "transmittance" ? 0.2 : 0.05;
      const over = model.tags[0] === "absorbance" ? 0.2 : 0.08;
      model.y_range.setv({ start: bottom - under * room, end: top + over * room });
    }

    function useTool(name) {
      plots.forEach(({ model }) => {
        model.toolbar.tools.forEach((tool) => {
          if (tool.name === "box" || tool.name === "pan") tool.active = tool.name === name;
        });
      });
      stage.querySelectorAll("[data-plot-do][aria-pressed]").forEach((button) => {
        button.setAttribute("aria-pressed", String(button.dataset.plotDo === name));
      });
    }

    function act(name) {
      if (!plots.length) return;
      const { start: high, end: low } = plots[0].model.x_range;
      const span = high - low;
      const acts = {
        box: () => useTool("box"),
        pan: () => useTool("pan"),
        in: () => moveTo(high - span / 5, low + span / 5),
        out: () => moveTo(high + span / 3, low - span / 3),
        left: () => moveTo(high + span / 4, low + span / 4),
        right: () => moveTo(high - span / 4, low - span / 4),
        reset: () => moveTo(whole.start, whole.end),
      };
      if (acts[name]) acts[name]();
    }

    stage.querySelectorAll("[data-plot-do]").forEach((button) => button.addEventListener("click", () => act(button.dataset.plotDo)));
    stage.querySelectorAll('input[name="show"], input[name="overlay"]').forEach((input) => input.addEventListener("change", load));
    area.addEventListener("keydown", (event) => {
      if (event.target !== area || event.ctrlKey || event.metaKey || event.altKey) return;
      const name = { ArrowLeft: "left", ArrowRight: "right", "+": "in", "=": "in", "-": "out", 0: "reset" }[event.key];
      if (!name) return;
      event.preventDefault();
      act(name);
    });
    NARROW.addEventListener("change", () => { if (plots.length) fitBorders(); });
    new ResizeObserver(() => { if (stage.labPlot) window.requestAnimationFrame(() => say("lab:view")); }).observe(area);
    window.addEventListener("beforeprint", () => { if (stage.labPlot) say("lab:view"); });
    load();
  }

  document.addEventListener("DOMContentLoaded", () => {
    document.querySelectorAll(".stage[data-plot-url]").forEach(start);
  });
})();
