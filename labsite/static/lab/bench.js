/* Lays the evidence lanes on the plot's axis, sets the band marks, and lights what belongs together.
 *
 * Whatever carries data-group (keys of groups) or data-band (keys of bands), each a list parted by spaces, takes part:
 * claims, lanes, windows, band rows, rows of verdicts, band marks. Pointing or focus lights; pressing keeps; Esc lets go.
 */
(() => {
  "use strict";

  const words = (text) => (text || "").split(/\s+/).filter(Boolean);
  const LINKED = "[data-group], [data-band]";
  const isClaimLike = (element) => element.hasAttribute("data-group");
  let kept = null;

  /* What one element stands for: its groups, and the bands of everything that carries one of those groups. */
  function meaningOf(element) {
    const groups = new Set(words(element.dataset.group));
    const bands = new Set(words(element.dataset.band));
    if (groups.size) {
      document.querySelectorAll("[data-group]").forEach((other) => {
        if (words(other.dataset.group).some((group) => groups.has(group))) words(other.dataset.band).forEach((band) => bands.add(band));
      });
    }
    return { groups, bands, claimLike: isClaimLike(element), element };
  }

  function belongs(element, meaning) {
    if (element === meaning.element) return true;
    if (words(element.dataset.group).some((group) => meaning.groups.has(group))) return true;
    const shares = words(element.dataset.band).some((band) => meaning.bands.has(band));
    /* From a claim or lane: its bands and windows, not every other claim that happens to share a band. */
    if (isClaimLike(element) && meaning.claimLike) return false;
    const owner = element.closest("[data-group]");
    if (meaning.claimLike && owner && owner !== element) {
      return shares && (words(owner.dataset.group).some((group) => meaning.groups.has(group)) || owner === meaning.element);
    }
    return shares;
  }

  function light(element) {
    const meaning = element ? meaningOf(element) : null;
    const dull = meaning !== null && (meaning.groups.size > 0 || meaning.bands.size > 0);
    document.querySelectorAll(LINKED).forEach((other) => other.classList.toggle("lit", dull && belongs(other, meaning)));
    document.body.classList.toggle("some-lit", dull);
    document.querySelectorAll(".stage").forEach(showLitWindows);
  }

  function keep(element) {
    kept = kept === element ? null : element;
    document.querySelectorAll(".link-key[aria-pressed], .band-mark[aria-pressed]").forEach((key) => {
      key.setAttribute("aria-pressed", String(kept !== null && key.closest(LINKED) === kept));
    });
    light(kept || element);
    const said = document.querySelector(".plot-said");
    if (!said) return;
    if (!kept) { said.textContent = ""; return; }
    const { bands } = meaningOf(kept);
    const name = kept.querySelector(".lane-title, h3, th")?.textContent.trim() || kept.getAttribute("aria-label") || "";
    said.textContent = `Kept: ${name.replace(/\s+/g, " ")}${bands.size ? `; bands at ${[...bands].join(", ")} cm⁻¹` : "; no band"}.`;
  }

  const linkedFrom = (event) => (event.target instanceof Element ? event.target.closest(LINKED) : null);
  document.addEventListener("pointerover", (event) => {
    if (event.pointerType === "touch") return;
    light(linkedFrom(event) || kept);
  });
  document.addEventListener("focusin", (event) => light(linkedFrom(event) || kept));
  document.addEventListener("focusout", (event) => { if (!event.relatedTarget) light(kept); });
  document.addEventListener("click", (event) => {
    const key = event.target instanceof Element ? event.target.closest(".link-key, .band-mark, .window") : null;
    if (!key) return;
    if (key.classList.contains("window")) { zoomToWindow(key); return; }
    keep(key.closest(LINKED));
  });
  document.addEventListener("keydown", (event) => {
    if (event.key === "Escape" && kept) keep(kept);
  });

  function zoomToWindow(element) {
    const plot = element.closest(".stage")?.labPlot;
    if (!plot) return;
    const low = Number(element.dataset.low);
    const high = Number(element.dataset.high);
    const room = Math.max((high - low) * 0.8, 40);
    plot.zoomTo(high + room, low - room);
  }

  /* Lanes */
  function layLanes(stage) {
    const plot = stage.labPlot;
    const list = stage.querySelector(".lane-list");
    if (!plot || !list) return;
    const frame = plot.frame();
    const shift = stage.querySelector(".plot-area").getBoundingClientRect().left - list.getBoundingClientRect().left;
    stage.style.setProperty("--frame-left", `${frame.left + shift}px`);
    stage.style.setProperty("--frame-width", `${frame.width}px`);
    stage.classList.add("lanes-laid");
    const { start: high, end: low } = plot.xRange;
    const share = (cm1) => (high - cm1) / (high - low);
    stage.querySelectorAll(".lane-track").forEach((track) => {
      const taken = [];
      track.querySelectorAll(":scope > .window").forEach((element) => {
        const from = share(Number(element.dataset.high));
        const to = share(Number(element.dataset.low));
        element.classList.toggle("window-out", to < 0 || from > 1);
        const left = Math.max(from, -0.01) * frame.width;
        const width = Math.max((Math.min(to, 1.01) - Math.max(from, -0.01)) * frame.width, 6);
        element.style.left = `${left}px`;
        element.style.width = `${width}px`;
        placeTicks(element, share, frame.width, left);
        placeLabel(element, left, width, frame.width, taken);
      });
      placeMasks(stage, track, share, frame.width);
    });
  }

  function placeTicks(element, share, frameWidth, left) {
    element.querySelectorAll(".tick").forEach((tick) => tick.remove());
    words(element.dataset.band).forEach((band) => {
      const at = share(Number(band)) * frameWidth - left;
      if (at < -2 || at > element.offsetWidth + 2) return;
      const tick = document.createElement("i");
      tick.className = "tick";
      tick.style.left = `${at}px`;
      element.append(tick);
    });
  }

  /* A label goes over its window, inside the track; one that would run into another is left to the title. */
  function placeLabel(element, left, width, frameWidth, taken) {
    const label = element.querySelector(".window-label");
    label.classList.remove("window-label-hidden");
    const wide = label.offsetWidth;
    const at = Math.min(Math.max(left + width / 2 - wide / 2, 0), Math.max(frameWidth - wide, 0));
    const clash = element.classList.contains("window-out") || taken.some(([from, to]) => at < to + 6 && at + wide > from - 6);
    label.classList.toggle("window-label-hidden", clash);
    label.style.left = `${at - left}px`;
    if (!clash) taken.push([at, at + wide]);
  }

  function placeMasks(stage, track, share, frameWidth) {
    track.querySelectorAll(".track-mask").forEach((mask) => mask.remove());
    stage.querySelectorAll("[data-masked]").forEach((region) => {
      const from = Math.max(share(Number(region.dataset.high)), 0);
      const to = Math.min(share(Number(region.dataset.low)), 1);
      if (to <= from) return;
      const mask = document.createElement("li");
      mask.className = "track-mask";
      mask.setAttribute("aria-hidden", "true");
      mask.style.left = `${from * frameWidth}px`;
      mask.style.width = `${(to - from) * frameWidth}px`;
      track.prepend(mask);
    });
  }

  /* Band marks over the plot: one stop for the keyboard, arrows step from band to band. */
  function makeMarks(stage) {
    const box = stage.querySelector(".band-marks");
    box.replaceChildren();
    const { bands, show } = stage.labPlot;
    bands.forEach((band) => {
      const mark = document.createElement("button");
      mark.type = "button";
      mark.className = "band-mark";
      mark.dataset.band = band.key;
      mark.tabIndex = -1;
      mark.setAttribute("aria-pressed", "false");
      mark.setAttribute("aria-label", `Band at ${band.key} cm⁻¹, height ${band.height.toFixed(3)} A, width ${band.width.toFixed(1)} cm⁻¹, ${band.shape}`);
      const label = document.createElement("span");
      label.className = "band-label";
      label.textContent = band.key;
      mark.append(label);
      box.append(mark);
    });
    const byPosition = [...box.children].sort((a, b) => Number(b.dataset.band) - Number(a.dataset.band));
    byPosition.forEach((mark) => box.append(mark));
    if (byPosition.length) byPosition[0].tabIndex = 0;
    box.classList.toggle("band-marks-under", show === "transmittance");
    box.hidden = false;
  }

  function placeMarks(stage) {
    const plot = stage.labPlot;
    const box = stage.querySelector(".band-marks");
    const frame = plot.frame();
    const under = plot.show === "transmittance";
    const taken = traceBoxes(plot, frame);
    const y = new Map();
    plot.bands.forEach((band) => y.set(band.key, plot.yOf(band.y)));
    /* plot.bands is in order of prominence: the most telling label gets its place first. */
    plot.bands.forEach((band) => {
      const mark = [...box.children].find((child) => child.dataset.band === band.key);
      const x = plot.xOf(band.x);
      const top = y.get(band.key);
      const inside = x >= frame.left - 1 && x <= frame.left + frame.width + 1 && top >= frame.top - 2 && top <= frame.top + frame.height + 2;
      mark.hidden = !inside;
      if (!inside) return;
      mark.style.left = `${x}px`;
      mark.style.top = `${top}px`;
      const label = mark.firstElementChild;
      label.classList.remove("band-label-hidden");
      const long = label.offsetHeight;
      const rect = under ? [x - 6, top + 12, x + 6, top + 13 + long] : [x - 6, top - 13 - long, x + 6, top - 12];
      const off = rect[1] < frame.top - 10 || rect[3] > frame.top + frame.height + 10;
      const clash = off || taken.some((other) => rect[0] < other[2] && rect[2] > other[0] && rect[1] < other[3] && rect[3] > other[1]);
      label.classList.toggle("band-label-hidden", clash);
      if (!clash) taken.push(rect);
    });
  }

  /* The trace itself, as thin boxes: no label is written over it. */
  function traceBoxes(plot, frame) {
    const { x: xs, y: ys } = plot.trace;
    const { start: high, end: low } = plot.xRange;
    const columns = new Map();
    for (let i = 0; i < xs.length; i += 1) {
      if (xs[i] < low || xs[i] > high || !Number.isFinite(ys[i])) continue;
      const column = Math.round(((high - xs[i]) / (high - low)) * (frame.width / 4));
      const y = ys[i];
      const seen = columns.get(column);
      if (!seen) columns.set(column, [y, y]);
      else { if (y < seen[0]) seen[0] = y; if (y > seen[1]) seen[1] = y; }
    }
    return [...columns].map(([column, [bottom, top]]) => [frame.left + column * 4 - 2, plot.yOf(top) - 1, frame.left + column * 4 + 2, plot.yOf(bottom) + 1]);
  }

  /* Windows of what is lit, as quiet columns over the plot. */
  function showLitWindows(stage) {
    stage.querySelectorAll(".plot-column").forEach((column) => column.remove());
    const plot = stage.labPlot;
    if (!plot) return;
    const frame = plot.frame();
    const area = stage.querySelector(".plot-area");
    stage.querySelectorAll(".lane.lit > .lane-track > .window, .window.lit").forEach((element) => {
      const left = Math.max(plot.xOf(Number(element.dataset.high)), frame.left);
      const right = Math.min(plot.xOf(Number(element.dataset.low)), frame.left + frame.width);
      if (right <= left) return;
      const column = document.createElement("div");
      column.className = `plot-column plot-column-${element.classList.contains("window-found") ? "found" : "other"}`;
      column.style.left = `${left}px`;
      column.style.width = `${right - left}px`;
      column.style.top = `${frame.top}px`;
      column.style.height = `${frame.height}px`;
      area.append(column);
    });
  }

  /* One hairline through plot and lanes under the pointer. */
  function followPointer(stage) {
    const line = document.createElement("div");
    line.className = "hairline";
    line.hidden = true;
    line.setAttribute("aria-hidden", "true");
    const value = document.createElement("span");
    line.append(value);
    stage.append(line);
    stage.addEventListener("pointermove", (event) => {
      const plot = stage.labPlot;
      if (!plot) return;
      const area = stage.querySelector(".plot-area").getBoundingClientRect();
      const frame = plot.frame();
      const x = event.clientX - area.left;
      const lanes = stage.querySelector(".lane-list")?.getBoundingClientRect();
      const bottom = lanes ? lanes.bottom : area.bottom;
      const inside = x >= frame.left && x <= frame.left + frame.width && event.clientY >= area.top && event.clientY <= bottom;
      line.hidden = !inside;
      if (!inside) return;
      const origin = stage.getBoundingClientRect();
      const { start: high, end: low } = plot.xRange;
      line.style.left = `${event.clientX - origin.left - stage.clientLeft}px`;
      line.style.top = `${area.top - origin.top + frame.top}px`;
      line.style.height = `${bottom - area.top - frame.top}px`;
      value.textContent = event.clientY > area.bottom ? `${(high - ((x - frame.left) / frame.width) * (high - low)).toFixed(0)} cm⁻¹` : "";
    });
    stage.addEventListener("pointerleave", () => { line.hidden = true; });
  }

  function start(stage) {
    followPointer(stage);
    stage.addEventListener("lab:plot", () => makeMarks(stage));
    stage.addEventListener("lab:view", () => {
      layLanes(stage);
      placeMarks(stage);
      showLitWindows(stage);
    });
    stage.querySelector(".band-marks").addEventListener("keydown", (event) => {
      const step = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
      if (!step) return;
      const marks = [...event.currentTarget.children].filter((mark) => !mark.hidden);
      const next = marks[marks.indexOf(document.activeElement) + step];
      event.preventDefault();
      if (!next) return;
      marks.forEach((mark) => { mark.tabIndex = mark === next ? 0 : -1; });
      next.focus();
    });
  }

  document.addEventListener("DOMContentLoaded", () => document.querySelectorAll(".stage").forEach(start));

  /* A part that was answered takes the place of the one that had the focus: give the focus to its successor. */
  let leftAt = "";
  document.addEventListener("htmx:beforeSwap", (event) => {
    const asked = event.detail.requestConfig?.elt;
    leftAt = asked?.closest(".claim[id], .point[id]")?.id || "";
  });
  document.addEventListener("htmx:afterSettle", () => {
    kept = null;
    light(null);
    if (!leftAt || document.activeElement !== document.body) return;
    document.getElementById(leftAt)?.querySelector("button, a, summary")?.focus({ preventScroll: true });
    leftAt = "";
  });
})();
