"use strict";
// Draws the figures that the page carries, in the colours of the screen or of paper, and answers slider, click and budget.
(() => {
  const report = JSON.parse(document.getElementById("report").textContent);
  const byId = (name) => document.getElementById(name);
  const touched = matchMedia("(pointer: coarse)");
  const PRINTED_WIDTH = 680;
  const narrow = (width) => width < 520;

  const coloured = (value, key, style) => {
    if (Array.isArray(value)) return value.map((item) => coloured(item, key, style));
    if (value && typeof value === "object")
      return Object.fromEntries(Object.entries(value).map(([k, v]) => [k, coloured(v, k, style)]));
    const isColour = typeof value === "string" && /color$/.test(key) && value.startsWith("--");
    return isColour ? style.getPropertyValue(value).trim() : value;
  };

  const draw = (name, printing = false) => {
    const place = byId(`picture-${name}`);
    const style = getComputedStyle(document.documentElement);
    const { data, layout } = coloured(report.figures[name], "", style);
    const width = printing ? Math.min(PRINTED_WIDTH, place.clientWidth) : place.clientWidth;
    layout.width = width;
    layout.font.family = getComputedStyle(document.body).fontFamily;
    if (narrow(width)) fitNarrow(layout);
    const still = touched.matches || narrow(width);
    if (still) hold(layout);
    const buttons = [["zoomIn2d", "zoomOut2d", "resetScale2d", "toImage"]];
    const config = { displaylogo: false, modeBarButtons: buttons, displayModeBar: still ? false : "hover" };
    return Plotly.react(place, data, layout, config);
  };

  const fitNarrow = (layout) => {
    layout.font.size = 11;
    layout.margin.l = 46;
    layout.margin.r = Math.min(layout.margin.r, 104);
    for (const note of layout.annotations || []) {
      if (note.font) note.font.size = Math.min(note.font.size || 11, 11);
      if (layout.margin.r > 100 && note.text.length > 13) note.text = cut(note.text, 12);
    }
  };

  // A finger that strokes over a picture scrolls the page.
  const hold = (layout) => {
    layout.dragmode = false;
    for (const axis of [layout.xaxis, layout.yaxis, layout.yaxis2]) if (axis) axis.fixedrange = true;
  };

  // Counts a written-out character reference as the one character that it stands for.
  const cut = (text, most) => {
    const pieces = text.match(/&[#\w]+;|[^]/gu) || [];
    return pieces.length > most ? `${pieces.slice(0, most - 1).join("")}…` : text;
  };

  const names = Object.keys(report.figures);
  const drawAll = (printing) => Promise.all(names.map((name) => draw(name, printing)));

  // The line at `x` in a picture, kept for the next time that it is drawn.
  const moveLine = (name, x) => {
    const line = report.figures[name].layout.shapes[0];
    line.x0 = line.x1 = x;
    Plotly.relayout(byId(`picture-${name}`), { "shapes[0].x0": x, "shapes[0].x1": x });
  };

  const startSlider = () => {
    const slider = byId("strength");
    if (!slider || !report.figures.paths) return;
    const { steps, tables } = report.models;
    const show = () => {
      const at = Number(slider.value);
      slider.setAttribute("aria-valuetext", steps[at].value);
      byId("model-said").textContent = steps[at].said;
      byId("model").innerHTML = tables[at];
      moveLine("paths", steps[at].x);
    };
    slider.addEventListener("input", show);
    byId("picture-paths").addEventListener("click", (event) => {
      const field = event.currentTarget.querySelector(".nsewdrag");
      if (!field) return;
      const box = field.getBoundingClientRect();
      const [left, right] = event.currentTarget.layout.xaxis.range;
      const across = (event.clientX - box.left) / box.width;
      if (across < 0 || across > 1 || event.clientY < box.top || event.clientY > box.bottom) return;
      const clicked = left + across * (right - left);
      const gaps = steps.map((step) => Math.abs(Math.log10(step.x) - clicked));
      slider.value = String(gaps.indexOf(Math.min(...gaps)));
      show();
    });
    slider.setAttribute("aria-valuetext", steps[Number(slider.value)].value);
  };

  const share = (value, digits) => (value === null ? "unknown" : `${(100 * value).toFixed(digits)} %`);

  const answerBudget = () => {
    const { messages_per_day: perDay, rows } = report.budget;
    const asked = Number(byId("budget").value);
    const said = byId("budget-said");
    if (byId("budget").value.trim() === "" || !(asked >= 0)) {
      said.textContent = "Give a number, zero or more.";
      return;
    }
    const most = perDay ? asked / perDay : asked / 100;
    const within = rows.filter((row) => row[1] <= most);
    if (!within.length) {
      const [threshold, flagged] = rows[0];
      const few = perDay ? `${(flagged * perDay).toFixed(1)} alerts a day` : share(flagged, 4);
      said.textContent = `Too few for any threshold listed: even ${threshold.toFixed(3)} flags ${few}.`;
      moveLine("thresholds", threshold);
      return;
    }
    const [threshold, flagged, precision, recall] = within[within.length - 1];
    const alerts = perDay ? `about ${Math.round(flagged * perDay).toLocaleString("en-US")} alerts a day, ` : "";
    said.textContent =
      `Threshold ${threshold.toFixed(3)}: ${alerts}${share(flagged, 2)} of the messages; ` +
      `${share(precision, 1)} of the alerts are right, and they find ${share(recall, 1)} of all yes answers.`;
    moveLine("thresholds", threshold);
  };

  const startSwitches = () => {
    for (const group of document.querySelectorAll("[data-switch]")) {
      const figure = report.figures[group.dataset.switch];
      const buttons = [...group.querySelectorAll("button")];
      for (const button of buttons)
        button.addEventListener("click", () => {
          for (const other of buttons) other.setAttribute("aria-pressed", String(other === button));
          const view = figure.views[button.dataset.view];
          figure.layout.xaxis.range = view["xaxis.range"];
          figure.layout.yaxis.range = view["yaxis.range"];
          Plotly.relayout(byId(`picture-${group.dataset.switch}`), view);
        });
    }
  };

  const startPrinting = () => {
    let opened = [];
    addEventListener("beforeprint", () => {
      opened = [...document.querySelectorAll("details[data-printed]:not([open])")];
      document.documentElement.classList.add("paper");
      for (const part of opened) part.open = true;
      drawAll(true);
    });
    addEventListener("afterprint", () => {
      for (const part of opened) part.open = false;
      document.documentElement.classList.remove("paper");
      drawAll(false);
    });
  };

  const start = async () => {
    await drawAll(false);
    startSlider();
    startSwitches();
    if (byId("budget")) {
      byId("budget").addEventListener("input", answerBudget);
      answerBudget();
    }
    startPrinting();
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => drawAll(false));
    let width = innerWidth;
    addEventListener("resize", () => {
      if (innerWidth === width) return; // a phone's address bar that comes or goes changes only the height
      width = innerWidth;
      drawAll(false);
    });
    document.documentElement.dataset.drawn = String(names.length);
  };
  start();
})();
