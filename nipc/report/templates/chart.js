/* Small charts in the hand of the static figures, drawn anew whenever the panel answers. */
nipc.chart = (holder, { height = 190, label }) => {
  const width = 460, left = 74, right = 456, top = 12, bottom = height - 40;
  const drawing = nipc.svg("svg", {
    viewBox: `0 0 ${width} ${height}`, role: "img", "aria-label": label,
  });
  holder.replaceChildren(drawing);
  let scaleX = null, scaleY = null, frame = null;

  const ticks = (low, high, most) => {
    const rough = (high - low) / most, power = 10 ** Math.floor(Math.log10(rough));
    const step = power * [1, 2, 5, 10].find(m => m * power >= rough * (1 - 1e-9));
    const found = [];
    for (let k = Math.ceil(low / step - 1e-9); k * step <= high + 1e-9 * step; k++) {
      found.push(k * step);
    }
    return found;
  };
  const text = (content, attributes, parent) => {
    nipc.svg("text", { fill: "var(--ink)", "font-size": 11, ...attributes }, parent)
      .textContent = content;
  };

  return {
    /* Axes anew: limits, labels; `digits` of the ticks that tell neighbours apart. */
    clear({ x, y, xLabel, yLabel }) {
      drawing.replaceChildren();
      scaleX = v => left + (v - x[0]) / (x[1] - x[0] || 1) * (right - left);
      scaleY = v => bottom - (v - y[0]) / (y[1] - y[0] || 1) * (bottom - top);
      const clip = `${holder.id}-clip`;
      const definition = nipc.svg("clipPath", { id: clip }, nipc.svg("defs", {}, drawing));
      nipc.svg("rect", { x: left, y: top - 1, width: right - left, height: bottom - top + 2 },
        definition);
      for (const v of ticks(x[0], x[1], 6)) {
        nipc.svg("path", { d: `M${scaleX(v)} ${top}V${bottom}`, stroke: "var(--faint)" }, drawing);
        const label = nipc.number(v, 6), over = scaleX(v) + 3.4 * label.length > width;
        text(label, { x: over ? width : scaleX(v), y: bottom + 15,
          "text-anchor": over ? "end" : "middle" }, drawing);
      }
      const span = y[1] - y[0];
      const digits = Math.min(Math.max(
        Math.ceil(Math.log10(Math.max(Math.abs(y[0]), Math.abs(y[1])) / span)) + 2, 3), 8);
      for (const v of ticks(y[0], y[1], 4)) {
        nipc.svg("path", { d: `M${left} ${scaleY(v)}H${right}`, stroke: "var(--faint)" }, drawing);
        text(nipc.number(Math.abs(v) < 1e-9 * span ? 0 : v, digits),
          { x: left - 6, y: scaleY(v) + 4, "text-anchor": "end" }, drawing);
      }
      nipc.svg("path", { d: `M${left} ${top}V${bottom}H${right}`, fill: "none",
        stroke: "var(--soft)", "stroke-width": 0.7 }, drawing);
      text(xLabel, { x: (left + right) / 2, y: bottom + 32, "text-anchor": "middle" }, drawing);
      text(yLabel, { transform: `translate(12 ${(top + bottom) / 2}) rotate(-90)`,
        "text-anchor": "middle" }, drawing);
      frame = nipc.svg("g", { "clip-path": `url(#${clip})` }, drawing);
    },
    area(xs, lows, highs, attributes) {
      const forth = xs.map((v, i) => `${scaleX(v).toFixed(2)} ${scaleY(highs[i]).toFixed(2)}`);
      const back = xs.map((v, i) => `${scaleX(v).toFixed(2)} ${scaleY(lows[i]).toFixed(2)}`);
      nipc.svg("path", { d: `M${forth.concat(back.reverse()).join("L")}Z`, ...attributes }, frame);
    },
    line(xs, ys, attributes) {
      let pen = "M", d = "";
      xs.forEach((v, i) => {
        if (!Number.isFinite(ys[i])) { pen = "M"; return; }
        d += `${pen}${scaleX(v).toFixed(2)} ${scaleY(ys[i]).toFixed(2)}`;
        pen = "L";
      });
      nipc.svg("path", { d: d || "M0 0", fill: "none", "stroke-width": 1.6, ...attributes }, frame);
    },
    shade(from, to, opacity) {
      if (!(to > from)) return;
      nipc.svg("rect", { x: scaleX(from), y: top, width: scaleX(to) - scaleX(from),
        height: bottom - top, fill: "var(--doubt)", "fill-opacity": opacity }, frame);
    },
    upright(x, attributes) {
      nipc.svg("path", { d: `M${scaleX(x)} ${top}V${bottom}`, ...attributes }, frame);
    },
    level(y, attributes) {
      nipc.svg("path", { d: `M${left} ${scaleY(y)}H${right}`, ...attributes }, frame);
    },
  };
};
