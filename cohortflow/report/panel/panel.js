// The what-if panel: the library's own arithmetic on the schedule that the page carries. No network, no library.
// Mirrors cohortflow/whatif/{change,paths,settle}.py; tests/browser/test_panel.py holds the two against each other.
(() => {
  "use strict";

  // ---- arithmetic ----
  const zeros = (n) => new Array(n).fill(0);

  const dense = (rows, size) =>
    rows.map((row) => {
      const out = zeros(size);
      for (let k = 0; k < row.length; k += 2) out[row[k]] = row[k + 1];
      return out;
    });

  const unpack = (data) =>
    data.components.map((part) => ({
      ...part,
      matrices: part.matrices.map((rows) => dense(rows, part.report.length)),
      start: dense(part.start, part.report.length),
      join: dense(part.join, part.report.length),
    }));

  // one row takes d on its move; the balance gives it up in proportion; what cannot be met is met as far as it goes
  const shiftRow = (row, report, move, pays, wanted, landing) => {
    let here = 0;
    let pool = 0;
    row.forEach((p, c) => {
      if (report[c] === move.to) here += p;
      if (pays[report[c]]) pool += p;
    });
    let d = Math.min(Math.max(wanted, -here), pool);
    if ((d < 0 && pool <= 0) || (d > 0 && here <= 0 && !landing)) d = 0;
    if (d === 0) return { row, met: wanted === 0 };
    const out = row.map((p, c) => {
      const gain = report[c] === move.to ? (here > 0 ? p / here : landing[c]) : 0;
      const loss = pays[report[c]] && pool > 0 ? p / pool : 0;
      return Math.max(p + d * (gain - loss), 0);
    });
    return { row: out, met: Math.abs(d - wanted) < 1e-12 };
  };

  const changedMatrix = (matrix, part, index, data, adds) => {
    let met = true;
    const out = matrix.slice();
    data.moves.forEach((move, n) => {
      if (!adds[n]) return;
      part.report.forEach((state, r) => {
        if (state !== move.from) return;
        const landing = (move.landing[index] || {})[r];
        const found = shiftRow(out[r], part.report, move, move.pays, adds[n], landing);
        out[r] = found.row;
        met = met && found.met;
      });
    });
    return { matrix: out, met };
  };

  const position = (part, step) => {
    const length = part.matrices.length;
    return part.tail === "cycle" ? step % length : Math.min(step, length - 1);
  };

  const through = (x, matrix) => {
    const out = zeros(matrix[0].length);
    for (let i = 0; i < x.length; i += 1) {
      if (x[i] !== 0) for (let j = 0; j < out.length; j += 1) out[j] += x[i] * matrix[i][j];
    }
    return out;
  };

  const expectedPay = (matrix, report, amounts) =>
    matrix.map((row, i) => row.reduce((sum, p, j) => sum + p * amounts[report[i]][report[j]], 0));

  const dot = (a, b) => a.reduce((sum, v, k) => sum + v * b[k], 0);

  const solve = (system, right) => {
    const a = system.map((row, i) => [...row, right[i]]);
    const n = a.length;
    for (let k = 0; k < n; k += 1) {
      let best = k;
      for (let i = k + 1; i < n; i += 1) if (Math.abs(a[i][k]) > Math.abs(a[best][k])) best = i;
      [a[k], a[best]] = [a[best], a[k]];
      if (Math.abs(a[k][k]) < 1e-300) return null;
      for (let i = k + 1; i < n; i += 1) {
        const f = a[i][k] / a[k][k];
        if (f !== 0) for (let j = k; j <= n; j += 1) a[i][j] -= f * a[k][j];
      }
    }
    const x = zeros(n);
    for (let k = n - 1; k >= 0; k -= 1) {
      let sum = a[k][n];
      for (let j = k + 1; j < n; j += 1) sum -= a[k][j] * x[j];
      x[k] = sum / a[k][k];
    }
    return x;
  };

  const joinersAt = (data, step, factor, start) =>
    data.joined[step].map((n, k) => n * (step >= start ? factor : 1) + data.returned[step][k]);

  // the base period by period: customers by state, contributions, whether every change could be met
  const walk = (data, parts, adds, factor, start) => {
    const size = data.states.length;
    const periods = data.joined.length;
    const counts = Array.from({ length: periods + 1 }, () => zeros(size));
    const paid = zeros(periods);
    let met = true;
    parts.forEach((part, index) => {
      let x = through(data.opening, part.start);
      const put = (h) => x.forEach((n, c) => { counts[h][part.report[c]] += n; });
      put(0);
      for (let h = 0; h < periods; h += 1) {
        let matrix = part.matrices[position(part, part.first + h)];
        if (h >= start) {
          const found = changedMatrix(matrix, part, index, data, adds);
          matrix = found.matrix;
          met = met && found.met;
        }
        if (data.amounts) paid[h] += dot(x, expectedPay(matrix, part.report, data.amounts));
        const coming = through(joinersAt(data, h, factor, start), part.join);
        x = through(x, matrix).map((n, c) => n + coming[c]);
        put(h + 1);
      }
    });
    return { counts, paid, met };
  };

  // where constant joiners keep the base up, averaged over a season; null when it has no settled size
  const settle = (data, parts, adds, factor) => {
    if (!data.settles) return null;
    const total = zeros(data.states.length);
    const inflow = data.constant_joined.map((n, k) => n * factor + data.constant_returned[k]);
    for (let index = 0; index < parts.length; index += 1) {
      const part = parts[index];
      const length = part.tail === "cycle" ? part.matrices.length : 1;
      const begins = part.tail === "cycle" ? 0 : part.matrices.length;
      const inside = part.report.map((_, c) => c).filter((c) => !data.exits[part.report[c]]);
      const turns = [];
      for (let k = 0; k < length; k += 1) {
        const matrix = part.matrices[position(part, part.first + begins + k)];
        turns.push(changedMatrix(matrix, part, index, data, adds).matrix);
      }
      const coming = through(inflow, part.join);
      const keep = (x) => x.map((n, c) => (data.exits[part.report[c]] ? 0 : n));
      const around = (x, joiners) => turns.reduce((y, m) => keep(through(y, m)).map((n, c) => n + joiners[c]), x);
      const none = zeros(part.report.length);
      const images = inside.map((c) => around(none.map((_, k) => (k === c ? 1 : 0)), none));
      const fixed = around(none, coming);
      const system = inside.map((b, row) => inside.map((a, col) => (row === col ? 1 : 0) - images[col][b]));
      const found = solve(system, inside.map((c) => fixed[c]));
      if (!found || found.some((n) => !(n > -1e-6))) return null;
      let x = none.slice();
      inside.forEach((c, k) => { x[c] = found[k]; });
      turns.forEach((matrix) => {
        x.forEach((n, c) => { total[part.report[c]] += n / length; });
        x = keep(through(x, matrix)).map((n, c) => n + coming[c]);
      });
    }
    return total;
  };

  const sumOf = (counts, members) => members.reduce((sum, k) => sum + counts[k], 0);

  // every figure that the panel shows
  const figures = (data, parts, adds, factor, start) => {
    const { counts, paid, met } = walk(data, parts, adds, factor, start);
    const settled = settle(data, parts, adds, factor);
    const last = counts[counts.length - 1];
    return {
      live: counts.map((row) => sumOf(row, data.live)),
      lost: data.exit_states.map((k) => last[k]),
      value: data.amounts ? dot(paid, data.discount) : null,
      settled: settled === null ? null : sumOf(settled, data.live),
      counts,
      met,
    };
  };

  // ---- words ----
  const whole = new Intl.NumberFormat("en-GB", { maximumFractionDigits: 0 });
  const shown = (n) => (n === null ? "not known" : whole.format(Math.round(n) + 0));
  const gain = (n) => (n === null ? "" : Math.round(n) > 0 ? `+${whole.format(Math.round(n))}` : shown(n));
  const points = (add) => `${add > 0 ? "+" : ""}${(100 * add).toFixed(2)} points`;

  // ---- drawing ----
  const SVG = "http://www.w3.org/2000/svg";
  const W = 640;
  const H = 240;
  const EDGE = { left: 56, right: 14, top: 14, bottom: 30 };

  const node = (name, attributes, text) => {
    const out = document.createElementNS(SVG, name);
    Object.entries(attributes).forEach(([key, value]) => out.setAttribute(key, value));
    if (text !== undefined) out.textContent = text;
    return out;
  };

  const niceStep = (range) => {
    const rough = range / 4;
    const power = 10 ** Math.floor(Math.log10(rough));
    return [1, 2, 5, 10].map((f) => f * power).find((s) => s >= rough);
  };

  const draw = (svg, data, now, then) => {
    const all = [...now.live, ...then.live];
    const room = Math.max(Math.max(...all) - Math.min(...all), 1e-9, 0.02 * Math.abs(Math.max(...all)));
    const step = niceStep(room);
    const low = Math.floor(Math.min(...all) / step) * step;
    const high = Math.ceil(Math.max(...all) / step) * step;
    const x = (h) => EDGE.left + ((W - EDGE.left - EDGE.right) * h) / (now.live.length - 1);
    const y = (n) => H - EDGE.bottom - ((H - EDGE.top - EDGE.bottom) * (n - low)) / (high - low || 1);
    const path = (values) => values.map((n, h) => `${h ? "L" : "M"}${x(h).toFixed(2)} ${y(n).toFixed(2)}`).join("");
    const parts = [];
    for (let tick = low; tick <= high + step / 2; tick += step) {
      parts.push(node("line", { x1: EDGE.left, x2: W - EDGE.right, y1: y(tick), y2: y(tick), class: "cf-grid" }));
      parts.push(node("text", { x: EDGE.left - 6, y: y(tick) + 4, "text-anchor": "end" }, shown(tick)));
    }
    const every = Math.max(1, Math.ceil(now.live.length / 7));
    data.labels.forEach((label, h) => {
      const anchor = x(h) > W - 50 ? "end" : "middle";
      if (h % every === 0) parts.push(node("text", { x: x(h), y: H - 10, "text-anchor": anchor }, label));
    });
    parts.push(node("path", { d: path(now.live), class: "cf-now" }));
    parts.push(node("path", { d: path(then.live), class: "cf-then" }));
    svg.replaceChildren(...parts);
  };

  // ---- the panel ----
  const begin = (root) => {
    const data = JSON.parse(root.querySelector(".cf-panel-data").textContent);
    const parts = unpack(data);
    const still = data.moves.map(() => 0);
    const now = figures(data, parts, still, 1, 0);
    const get = (selector) => root.querySelector(selector);
    const sliders = [...root.querySelectorAll("input[data-move]")];
    const joiners = get("input[data-joiners]");
    const starts = get("select[data-starts]");
    const svg = get("svg");

    const update = () => {
      const adds = sliders.map((slider) => Number(slider.value) / 1e4);
      const factor = joiners ? Number(joiners.value) / 100 : 1;
      const start = starts ? Number(starts.value) : 0;
      const then = figures(data, parts, adds, factor, start);
      sliders.forEach((slider, n) => {
        const move = data.moves[n];
        const rate = move.rate === null ? "" : `, now ${(100 * move.rate).toFixed(2)}%`;
        slider.setAttribute("aria-valuetext", `${points(adds[n])}${rate}`);
        get(`output[data-move="${n}"]`).textContent = points(adds[n]);
      });
      if (joiners) {
        joiners.setAttribute("aria-valuetext", `${joiners.value} percent of the joiners expected`);
        get("output[data-joiners]").textContent = `${joiners.value}%`;
      }
      const put = (key, a, b) => {
        get(`[data-now="${key}"]`).textContent = shown(a);
        get(`[data-then="${key}"]`).textContent = shown(b);
        get(`[data-gain="${key}"]`).textContent = gain(a === null || b === null ? null : b - a);
      };
      const end = now.live.length - 1;
      put("live", now.live[end], then.live[end]);
      data.exit_states.forEach((_, k) => put(`lost-${k}`, now.lost[k], then.lost[k]));
      if (data.amounts) put("value", now.value, then.value);
      put("settled", now.settled, then.settled);
      now.live.forEach((n, h) => {
        get(`[data-row="${h}"] [data-cell="now"]`).textContent = shown(n);
        get(`[data-row="${h}"] [data-cell="then"]`).textContent = shown(then.live[h]);
      });
      draw(svg, data, now, then);
      const words = `Live customers at the end of ${data.labels[end]}: ${shown(then.live[end])}, ` +
        `${gain(then.live[end] - now.live[end])} against the forecast as it stands.`;
      svg.setAttribute("aria-label", words);
      get("[data-words]").textContent = then.met ? words : `${words} ${data.short}`;
      root.cfFigures = then;
    };

    root.cfFiguresOf = (adds, factor, start) => figures(data, parts, adds, factor, start);
    [...sliders, joiners, starts].filter(Boolean).forEach((control) => control.addEventListener("input", update));
    get("form").addEventListener("submit", (event) => event.preventDefault());
    get("form").addEventListener("reset", () => setTimeout(update, 0));
    get("form").hidden = false;
    get("figure").hidden = false;
    get("[data-static]").hidden = true;
    root.dataset.ready = "yes";
    update();
  };

  document.querySelectorAll(".cf-panel:not([data-ready])").forEach(begin);
})();
