"use strict";
/* One time for all figures: a slider, a cursor in each, and the values there. */
const nipc = {};

nipc.data = id => {
  const holder = document.getElementById(id);
  return holder ? JSON.parse(holder.textContent) : null;
};

/* As nipc.report.numbers.number: so many significant digits, a true minus sign. */
nipc.number = (value, digits = 5) => {
  if (value === null || value === undefined || Number.isNaN(value)) return "–";
  if (!Number.isFinite(value)) return value > 0 ? "∞" : "−∞";
  if (value === 0) return "0";
  const [mantissa, exponent] = Math.abs(value).toExponential(digits - 1).split("e");
  const power = Number(exponent), sign = value < 0 ? "−" : "";
  if (power > -5 && power < 7) {
    const text = Math.abs(value).toFixed(Math.max(digits - 1 - power, 0));
    return sign + (text.includes(".") ? text.replace(/\.?0+$/, "") : text);
  }
  const up = String(power).replace(/./g, c => c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[Number(c)]);
  return sign + String(Number(mantissa)) + "\u202f×\u202f10" + up;
};
nipc.amount = (value, unit, digits) => nipc.number(value, digits) + (unit ? "\u202f" + unit : "");

/* A value in the form that its line asks for. */
nipc.formed = (value, { form, unit }) => {
  const [kind, digits] = form.split(":");
  if (kind === "text") return value || "–";
  if (value === null || !Number.isFinite(value)) return "–";
  if (kind === "percent") {
    const share = (100 * value).toFixed(1);
    return `${share === "0.0" && value > 0 ? "<\u202f0.1" : share}\u202f%`;
  }
  if (kind === "digits") return nipc.amount(value, unit, Number(digits));
  const text = Math.abs(value).toFixed(Number(digits));
  return (value < 0 && Number(text) ? "−" : "") + text + (unit ? "\u202f" + unit : "");
};

/* "" within the trust horizon, † for the distribution alone, ‡ not at all. */
nipc.mark = (time, what, end) => {
  const slack = 1e-9 * Math.max(Math.abs(end), 1);
  if (what.paths !== null && time <= what.paths + slack) return "";
  return what.distribution !== null && time <= what.distribution + slack ? "†" : "‡";
};

nipc.nearest = (times, time) => {
  let best = 0;
  times.forEach((t, i) => { if (Math.abs(t - time) < Math.abs(times[best] - time)) best = i; });
  return best;
};

nipc.svg = (name, attributes, parent) => {
  const made = document.createElementNS("http://www.w3.org/2000/svg", name);
  for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
  if (parent) parent.appendChild(made);
  return made;
};

nipc.clock = (() => {
  const { times, unit } = nipc.data("clock-data");
  const end = times[times.length - 1], listeners = [];
  const bar = document.getElementById("clock");
  const range = bar.querySelector("input"), shown = bar.querySelector("output");
  let index = times.length - 1;
  const set = to => {
    index = Math.min(Math.max(to, 0), times.length - 1);
    range.value = index;
    shown.textContent = nipc.amount(times[index], unit, 4);
    range.setAttribute("aria-valuetext", shown.textContent);
    listeners.forEach(listener => listener(times[index], index));
  };
  range.max = times.length - 1;
  range.addEventListener("input", () => set(Number(range.value)));
  set(index);
  bar.hidden = times.length < 2;
  return {
    times, unit, end, set,
    listen: listener => { listeners.push(listener); listener(times[index], index); },
    setTime: time => set(nipc.nearest(times, time)),
    get time() { return times[index]; },
  };
})();

for (const figure of document.querySelectorAll("figure")) {
  const holder = figure.querySelector("script.data");
  if (!holder) continue;
  const { frame, lines } = JSON.parse(holder.textContent);
  const plot = figure.querySelector(".plot"), drawing = plot.querySelector("svg");
  const readout = figure.querySelector(".readout");
  const origin = frame.elapsed ? nipc.clock.times[0] : 0;
  const warp = t => frame.logarithmic ? Math.log(t) : t;
  const first = warp(frame.start), span = warp(frame.end) - first;
  const cursor = nipc.svg("line", { class: "cursor", y1: frame.top, y2: frame.bottom }, drawing);
  const show = time => {
    const part = (warp(time - origin) - first) / span;
    const seen = part >= -1e-9 && part <= 1 + 1e-9;
    cursor.style.display = seen ? "" : "none";
    if (seen) {
      const x = frame.left + part * (frame.right - frame.left);
      cursor.setAttribute("x1", x);
      cursor.setAttribute("x2", x);
    }
    if (!lines.length) return;
    const at = nipc.nearest(nipc.clock.times, time);
    const marks = lines.map(line => nipc.mark(nipc.clock.times[at], line, nipc.clock.end));
    const same = marks.every(mark => mark === marks[0]);
    const words = lines.map((line, i) =>
      `${line.label} ${nipc.formed(line.values[at], line)}${same ? "" : marks[i]}`);
    const when = nipc.amount(nipc.clock.times[at], nipc.clock.unit, 4);
    readout.textContent = `At ${when}${same ? marks[0] : ""}: ${words.join("; ")}`;
  };
  const timeAt = event => {
    const box = drawing.getBoundingClientRect();
    const x = (event.clientX - box.left) * drawing.viewBox.baseVal.width / box.width;
    const part = (x - frame.left) / (frame.right - frame.left);
    if (part < -0.02 || part > 1.02) return null;
    const at = first + Math.min(Math.max(part, 0), 1) * span;
    return (frame.logarithmic ? Math.exp(at) : at) + origin;
  };
  plot.addEventListener("pointermove", event => {
    const time = timeAt(event);
    if (time !== null) show(time);
  });
  plot.addEventListener("pointerleave", () => show(nipc.clock.time));
  plot.addEventListener("click", event => {
    const time = timeAt(event);
    if (time !== null) nipc.clock.setTime(time);
  });
  nipc.clock.listen(show);
}

window.addEventListener("beforeprint", () => {
  document.querySelectorAll("details").forEach(part => { part.open = true; });
});
