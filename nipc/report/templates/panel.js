/* What if: member value = sum over terms of prod_j s_j^p_tj x contribution; see panel.py. */
nipc.panel = (() => {
  const kept = nipc.data("panel-data");
  if (!kept) return null;
  const section = document.getElementById("whatif");
  const { times, members, sources, powers, quantities, levels, unit } = kept;
  const count = times.length, end = times[count - 1];

  const raw = Uint8Array.from(atob(kept.blob), c => c.charCodeAt(0));
  const view = new DataView(raw.buffer), steps = new Int16Array(raw.length / 2);
  for (let i = 0; i < steps.length; i++) steps[i] = view.getInt16(2 * i, true);
  const place = [];
  let next = 0;
  kept.spread.forEach(row => place.push(row.map(has => {
    if (!has) return -1;
    next += count * members;
    return next - count * members;
  })));

  /* Sources that take part in a term, as bits: terms of equal bits are one part of the variance. */
  const bits = powers.map(row => row.reduce((sum, p, j) => sum + (p > 0 ? 2 ** j : 0), 0));
  const supports = [...new Set(bits.filter(b => b > 0))];
  const takes = (support, j) => Math.floor(support / 2 ** j) % 2 === 1;

  const variance = values => {
    const mean = values.reduce((a, b) => a + b, 0) / values.length;
    return values.reduce((a, b) => a + (b - mean) ** 2, 0) / values.length;
  };
  const quantile = (sorted, level) => {
    const at = level * (sorted.length - 1), below = Math.floor(at);
    const above = Math.min(below + 1, sorted.length - 1);
    return sorted[below] + (at - below) * (sorted[above] - sorted[below]);
  };

  /* Members of quantity q at time index k, and the variance of each part. */
  const membersAt = (q, k, weights, parts) => {
    const values = new Float64Array(members);
    const sums = new Map(supports.map(s => [s, parts ? new Float64Array(members) : null]));
    powers.forEach((_, t) => {
      const cell = (t * quantities.length + q) * count + k, weight = weights[t];
      const base = kept.offset[cell] * weight, step = kept.step[cell] * weight;
      const from = place[t][q] < 0 ? -1 : place[t][q] + k * members;
      const sum = parts && bits[t] > 0 ? sums.get(bits[t]) : null;
      for (let m = 0; m < members; m++) {
        const part = base + (from < 0 ? 0 : step * steps[from + m]);
        values[m] += part;
        if (sum) sum[m] += part;
      }
    });
    return { values, sums };
  };

  const weightsOf = scales => powers.map(row =>
    row.reduce((product, p, j) => product * (p ? scales[j] ** p : 1), 1));

  /* As nipc.report.panel.answer. */
  const answer = (scales, q, low, high) => {
    const weights = weightsOf(scales);
    const result = { quantiles: levels.map(() => []), mean: [], std: [], inside: [],
      first: sources.map(() => []), total: sources.map(() => []) };
    for (let k = 0; k < count; k++) {
      const { values, sums } = membersAt(q, k, weights, true);
      let inside = 0;
      for (const v of values) if (v >= low && v <= high) inside += 1;
      result.inside.push(inside / members);
      result.mean.push(values.reduce((a, b) => a + b, 0) / members);
      result.std.push(Math.sqrt(variance(values)));
      const sorted = values.slice().sort();
      levels.forEach((level, i) => result.quantiles[i].push(quantile(sorted, level)));
      const spread = supports.map(s => variance(sums.get(s)));
      const whole = spread.reduce((a, b) => a + b, 0);
      sources.forEach((_, j) => {
        let first = 0, total = 0;
        supports.forEach((s, i) => {
          if (!takes(s, j)) return;
          total += spread[i];
          if (s === 2 ** j) first += spread[i];
        });
        result.first[j].push(whole > 0 ? first / whole : NaN);
        result.total[j].push(whole > 0 ? total / whole : NaN);
      });
    }
    return result;
  };

  const ones = sources.map(() => 1), scales = ones.slice();
  const boxes = quantities.map(q => [q.low ?? -Infinity, q.high ?? Infinity]);
  const find = name => section.querySelector(`[data-part="${name}"]`);
  const chart = (name, label, height) => nipc.chart(find(name), { label, height });
  const charts = {
    band: chart("band", "Band of the chosen quantity at these scales"),
    inside: chart("inside", "Inside probability at these scales"),
    shares: chart("shares", "Driver shares at these scales"),
    cloud: chart("cloud", "Distribution at the time of the slider"),
  };
  const chooser = find("quantity"), said = find("said");
  const edges = { low: find("low"), high: find("high") };
  let chosen = Number(chooser.value), base = null, now = null, took = 0;
  const bases = [];
  const xAxis = { x: [times[0], end], xLabel: unit ? `time (${unit})` : "time" };

  const widened = (low, high, part) => {
    const room = part * (high - low) || 1e-3 * Math.abs(high) || 1;
    return [low - room, high + room];
  };
  const trustShades = target => {
    const { paths, distribution } = quantities[chosen];
    const from = paths ?? times[0], to = Math.max(distribution ?? from, from);
    target.shade(from, Math.min(to, end), 0.13);
    target.shade(Math.min(to, end), end, 0.26);
  };
  const finite = edge => Number.isFinite(edge);
  const was = { stroke: "var(--soft)", "stroke-dasharray": "3 2.5", "stroke-width": 1.1 };
  const boxLook = { stroke: "var(--edge)", "stroke-width": 1.4, "stroke-dasharray": "9 3 2 3" };

  const drawBand = () => {
    const q = quantities[chosen], box = boxes[chosen].filter(finite);
    let low = Math.min(...now.quantiles[0], ...base.quantiles[0]);
    let high = Math.max(...now.quantiles[4], ...base.quantiles[4]);
    const span = high - low;
    box.filter(e => e > low - 1.5 * span && e < high + 1.5 * span).forEach(e => {
      low = Math.min(low, e);
      high = Math.max(high, e);
    });
    charts.band.clear({ ...xAxis, y: widened(low, high, 0.06),
      yLabel: q.name.slice(0, 20) + (q.unit ? ` (${q.unit})` : "") });
    trustShades(charts.band);
    const fill = opacity => ({ fill: "var(--band)", "fill-opacity": opacity });
    charts.band.area(times, now.quantiles[0], now.quantiles[4], fill(0.5));
    charts.band.area(times, now.quantiles[1], now.quantiles[3], fill(0.95));
    charts.band.line(times, now.quantiles[2], { stroke: "var(--main)" });
    charts.band.line(times, base.quantiles[0], was);
    charts.band.line(times, base.quantiles[4], was);
    box.forEach(e => charts.band.level(e, boxLook));
  };
  const drawInside = () => {
    const boxed = boxes[chosen].some(finite);
    find("inside").parentElement.hidden = !boxed;
    if (!boxed) return;
    const lowest = Math.min(...now.inside, ...base.inside);
    charts.inside.clear({ ...xAxis, y: [lowest > 0.9 ? 0.9 : lowest > 0.5 ? 0.5 : 0, 1.01],
      yLabel: "P(inside)" });
    trustShades(charts.inside);
    charts.inside.line(times, base.inside, was);
    charts.inside.line(times, now.inside, { stroke: "var(--main)" });
  };
  const inks = ["first", "second", "third", "fourth", "fifth", "sixth", "seventh"];
  const drawShares = () => {
    charts.shares.clear({ ...xAxis, y: [0, 1], yLabel: "share" });
    let floor = times.map(() => 0);
    sources.forEach((_, j) => {
      const roof = floor.map((v, i) => v + (finite(now.first[j][i]) ? now.first[j][i] : 0));
      charts.shares.area(times, floor, roof, { fill: `var(--${inks[j % 7]})`,
        stroke: "var(--paper)", "stroke-width": 0.8 });
      floor = roof;
    });
    charts.shares.area(times, floor, floor.map(() => 1), { fill: "var(--rest)" });
    trustShades(charts.shares);
  };
  const drawCloud = k => {
    const { values } = membersAt(chosen, k, weightsOf(scales), false);
    const before = membersAt(chosen, k, weightsOf(ones), false).values;
    let low = Infinity, high = -Infinity;
    for (const set of [values, before]) for (const v of set) {
      low = Math.min(low, v);
      high = Math.max(high, v);
    }
    const [from, to] = widened(low, high, 0.02), bins = 24, width = (to - from) / bins;
    const heights = set => {
      const counts = new Array(bins).fill(0);
      for (const v of set) counts[Math.min(Math.floor((v - from) / width), bins - 1)] += 1;
      return counts.map(c => c / members);
    };
    const present = heights(values), past = heights(before);
    const outline = counts => [counts.flatMap((_, i) => [from + i * width, from + (i + 1) * width]),
      counts.flatMap(c => [c, c])];
    const q = quantities[chosen];
    charts.cloud.clear({ x: [from, to], y: [0, 1.08 * Math.max(...present, ...past)],
      xLabel: q.name.slice(0, 40) + (q.unit ? ` (${q.unit})` : ""), yLabel: "share of members" });
    const [xs, ys] = outline(present);
    charts.cloud.area(xs, ys.map(() => 0), ys, { fill: "var(--band)" });
    charts.cloud.line(...outline(past), was);
    boxes[chosen].filter(finite).forEach(e => charts.cloud.upright(e, boxLook));
  };
  const tell = k => {
    const q = quantities[chosen], at = nipc.amount(times[k], unit, 4) + nipc.mark(times[k], q, end);
    const places = base.std[k] > 0 ? Math.max(2 - Math.floor(Math.log10(base.std[k])), 0) : 3;
    const form = `decimals:${Math.min(places, 12)}`;
    const parts = [`At ${at}: ${q.name} ${nipc.formed(now.mean[k], { form, unit: "" })} ± `
      + `${nipc.formed(now.std[k], { form, unit: q.unit })} (was ± `
      + `${nipc.formed(base.std[k], { form, unit: q.unit })})`];
    if (boxes[chosen].some(finite)) {
      parts.push(`inside ${now.inside[k].toFixed(3)} (was ${base.inside[k].toFixed(3)})`);
    }
    const shares = sources.map((name, j) => [name, now.total[j][k]]).filter(s => finite(s[1]));
    shares.sort((a, b) => b[1] - a[1]);
    if (shares.length) {
      parts.push("total shares: " + shares.slice(0, 4).map(([name, s]) =>
        `${name} ${(100 * s).toFixed(0)}\u202f%`).join(", "));
    }
    said.textContent = parts.join("; ") + ".";
  };
  const atClock = () => nipc.nearest(times, nipc.clock.time);
  const update = () => {
    const started = performance.now(), q = quantities[chosen];
    bases[chosen] ??= answer(ones, chosen, q.low ?? -Infinity, q.high ?? Infinity);
    base = bases[chosen];
    now = answer(scales, chosen, ...boxes[chosen]);
    drawBand();
    drawInside();
    drawShares();
    drawCloud(atClock());
    tell(atClock());
    took = performance.now() - started;
  };
  const asked = input => input.value.trim() === "" ? NaN : Number(input.value);
  const fillEdges = () => {
    edges.low.value = finite(boxes[chosen][0]) ? boxes[chosen][0] : "";
    edges.high.value = finite(boxes[chosen][1]) ? boxes[chosen][1] : "";
    section.querySelectorAll("[data-unit]").forEach(holder => {
      holder.textContent = quantities[chosen].unit && `(${quantities[chosen].unit})`;
    });
  };
  const knobs = [...section.querySelectorAll("[data-source]")].map((row, j) => {
    const range = row.querySelector("input[type=range]"), shown = row.querySelector("output");
    const set = value => {
      scales[j] = value;
      range.value = value;
      shown.textContent = `× ${Number(value).toFixed(2)}`;
    };
    range.addEventListener("input", () => { set(Number(range.value)); update(); });
    set(1);
    return set;
  });
  edges.low.addEventListener("input", () => {
    const edge = asked(edges.low);
    boxes[chosen][0] = Number.isNaN(edge) ? -Infinity : edge;
    update();
  });
  edges.high.addEventListener("input", () => {
    const edge = asked(edges.high);
    boxes[chosen][1] = Number.isNaN(edge) ? Infinity : edge;
    update();
  });
  chooser.addEventListener("change", () => {
    chosen = Number(chooser.value);
    fillEdges();
    update();
  });
  section.querySelector("form").addEventListener("submit", event => event.preventDefault());
  find("reset").addEventListener("click", () => {
    knobs.forEach(set => set(1));
    quantities.forEach((q, i) => { boxes[i] = [q.low ?? -Infinity, q.high ?? Infinity]; });
    fillEdges();
    update();
  });
  section.querySelectorAll("[hidden].live").forEach(part => { part.hidden = false; });
  fillEdges();
  update();
  nipc.clock.listen(() => { drawCloud(atClock()); tell(atClock()); });
  return { answer, state: () => ({ chosen, scales, box: boxes[chosen], now, took }) };
})();
