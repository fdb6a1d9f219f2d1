"use strict";
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const root = document.documentElement;
  const darkByDevice = matchMedia("(prefers-color-scheme: dark)");
  const redraws = [];
  const resizes = [];
  let printing = false;

  // Theme: the device's wish, until the reader says otherwise.
  const themeButton = document.getElementById("theme");
  let chosenDark = null;
  const isDark = () => !printing && (chosenDark ?? darkByDevice.matches);
  function applyTheme() {
    root.dataset.theme = isDark() ? "dark" : "light";
    themeButton.setAttribute("aria-pressed", String(isDark()));
    for (const redraw of redraws) redraw();
  }
  const css = name => getComputedStyle(root).getPropertyValue(name).trim();
  themeButton.addEventListener("click", () => { chosenDark = !isDark(); applyTheme(); });
  darkByDevice.addEventListener("change", applyTheme);
  root.dataset.theme = isDark() ? "dark" : "light";
  themeButton.setAttribute("aria-pressed", String(isDark()));

  // Words and numbers. The rounding is that of the tables in the page's own HTML.
  function short(value, digits = 4) {
    if (value === 0) return "0";
    const [mantissa, power] = value.toExponential(digits - 1).split("e");
    const exponent = Number(power);
    const trim = text => text.includes(".") ? text.replace(/0+$/, "").replace(/\.$/, "") : text;
    const text = exponent < -4 || exponent >= 6
      ? trim(mantissa) + "e" + exponent
      : trim(Number(mantissa + "e" + exponent).toFixed(Math.max(0, digits - 1 - exponent)));
    return text.replaceAll("-", "−");
  }
  const raised = text => [...text].map(c => c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[c]).join("");
  function tick(value) {
    if (value === 0) return "0";
    const size = Math.abs(value);
    if (size >= 1e-3 && size < 1e6) return String(Number(value.toPrecision(6))).replace("-", "−");
    const [mantissa, power] = Number(value.toPrecision(6)).toExponential().split("e");
    return (mantissa === "1" ? "" : mantissa.replace("-", "−") + "·") + "10" + raised(power.replace("+", ""));
  }
  const withUnit = (text, unit) => unit ? text + " " + unit : text;
  function element(name, properties = {}, ...children) {
    const made = document.createElement(name);
    for (const [key, value] of Object.entries(properties)) {
      if (key in made && typeof value !== "string") made[key] = value;
      else made.setAttribute(key, value);
    }
    made.append(...children);
    return made;
  }
  function dataCell(value, digits) {
    const cell = element("td", { class: "n" });
    if (value !== null && value !== undefined) cell.append(element("data", { value: String(value) }, short(value, digits)));
    return cell;
  }

  // What is shown where: methods by name, and the time, shared by all charts of the page.
  const hidden = new Set();
  const onVisible = [];
  function setVisible(name, shown) {
    if (shown) hidden.delete(name); else hidden.add(name);
    for (const box of document.querySelectorAll("input[data-method]")) {
      if (box.dataset.method === name) box.checked = shown;
    }
    for (const tell of onVisible) tell();
  }
  let time = null;
  const onTime = [];
  function setTime(value) {
    time = value;
    for (const tell of onTime) tell();
  }
  const colorOf = look => isDark() ? look.dark : look.color;
  function sample(look) {
    const svg = document.createElementNS("http://www.w3.org/2000/svg", "svg");
    svg.setAttribute("width", "34");
    svg.setAttribute("height", "12");
    svg.setAttribute("aria-hidden", "true");
    const line = document.createElementNS("http://www.w3.org/2000/svg", "line");
    const paint = () => {
      line.setAttribute("stroke", colorOf(look));
    };
    for (const [key, value] of [["x1", 0], ["x2", 34], ["y1", 6], ["y2", 6], ["stroke-width", look.width], ["stroke-dasharray", look.dash.map(d => d * look.width).join(" ")]])
      line.setAttribute(key, value);
    paint();
    redraws.push(paint);
    svg.append(line);
    return svg;
  }
  function switchFor(name, look) {
    const box = element("input", { type: "checkbox", "data-method": name });
    box.checked = !hidden.has(name);
    box.addEventListener("change", () => setVisible(name, box.checked));
    return element("label", {}, box, look ? sample(look) : "", name);
  }

  let ids = 0;
  // A plot with its line of values: pointer or arrow keys move a cursor.
  function plotFrame(host, label) {
    const id = "readout" + ++ids;
    const frame = element("div", { class: "plot", tabindex: "0", role: "img", "aria-label": label, "aria-describedby": id });
    const readout = element("p", { class: "readout", id });
    host.append(frame, readout);
    frame.addEventListener("focus", () => readout.setAttribute("aria-live", "polite"));
    frame.addEventListener("blur", () => readout.removeAttribute("aria-live"));
    return { frame, readout };
  }
  function moveCursorByKeys(frame, chart, xs) {
    frame.addEventListener("keydown", event => {
      const last = xs().length - 1;
      let index = chart().cursor.idx ?? -1;
      const step = event.shiftKey ? 10 : 1;
      if (event.key === "ArrowRight") index = Math.min(last, index + step);
      else if (event.key === "ArrowLeft") index = Math.max(0, index < 0 ? 0 : index - step);
      else if (event.key === "Home") index = 0;
      else if (event.key === "End") index = last;
      else if (event.key === "Escape") index = -1;
      else return;
      event.preventDefault();
      const u = chart();
      u.setCursor(index < 0 ? { left: -10, top: -10 } : { left: u.valToPos(xs()[index], "x"), top: u.over.clientHeight / 2 });
    });
  }
  const font = () => "13px " + css("--sans");
  function axis(title, log, extra = {}) {
    return {
      stroke: () => css("--ink"),
      grid: { stroke: () => css("--grid"), width: 1 },
      ticks: { stroke: () => css("--muted"), width: 1, size: 5 },
      font: font(), labelFont: font(), label: title, labelSize: 20, labelGap: 0,
      // A logarithmic scale names 1, 2 and 5 of each decade at most; its own ends are no round numbers.
      values: (u, splits) => splits.map(v => v === null || v === undefined || (log && !/^[125](\.0*)?e/.test(v.toExponential(6))) ? "" : tick(v)),
      ...extra,
    };
  }
  const sizeOf = (host, tall) => ({ width: Math.max(240, host.clientWidth - 14), height: tall });

  function lineChart(host, panel, onClickTime) {
    const tables = [];
    const series = [{}];
    const names = [];
    const positive = (values, log) => values.map(v => v !== null && (!log || v > 0) ? v : null);
    for (const band of panel.bands) {
      tables.push([band.x, positive(band.high, panel.yLog)]);
      series.push({ label: band.label, stroke: "#0000", width: 0, fill: () => css("--band"), fillTo: u => u.scales.y.min, points: { show: false } });
      names.push(null);
    }
    for (const curve of panel.curves) {
      tables.push([curve.x, positive(curve.y, panel.yLog)]);
      series.push({
        label: curve.label, stroke: () => colorOf(curve.look), width: curve.look.width, dash: curve.look.dash.map(d => d * curve.look.width),
        points: { show: false }, paths: curve.stairs ? uPlot.paths.stepped({ align: 1 }) : undefined, show: !hidden.has(curve.label),
      });
      names.push(curve.label);
    }
    const all = uPlot.join(tables);
    const reach = log => log ? (low, high) => [low, high] : (low, high) => { const pad = (high - low || 1) * 0.06; return [low - pad, high + pad]; };
    const { frame, readout } = plotFrame(host, panel.yTitle + " against " + panel.xTitle + ": " + panel.curves.map(c => c.label).filter(Boolean).join(", "));
    const hint = "Point at the chart, or focus it and use ← and →, for values." + (onClickTime ? " A click sets the time." : "");
    readout.textContent = hint;
    let chart;
    const options = () => ({
      ...sizeOf(host, host.clientWidth < 560 ? 260 : 330),
      legend: { show: false },
      cursor: { drag: { x: false, y: false }, points: { size: 7 } },
      scales: {
        x: { time: false, distr: panel.xLog ? 3 : 1, range: panel.xLog ? reach(true) : (u, low, high) => { const pad = (high - low) * 0.012; return [panel.xFrom ?? low - pad, panel.xTo ?? high + pad]; } },
        y: { distr: panel.yLog ? 3 : 1, range: (u, low, high) => {
          const [a, b] = reach(panel.yLog)(low ?? 1, high ?? 10);
          const from = panel.yFrom ?? (panel.yLog ? Math.max(a, b / 1e7) / 1.5 : a);
          return [from, panel.yTo ?? (panel.yLog ? Math.max(b, from * 10) * 1.6 : b)];
        } },
      },
      axes: [axis(panel.xTitle, panel.xLog, { size: 34 }), axis(panel.yTitle, panel.yLog, { size: 64 })],
      series,
      hooks: {
        draw: [u => { if (onClickTime && time !== null) drawTime(u); }],
        setCursor: [u => {
          const i = u.cursor.idx;
          readout.replaceChildren();
          if (i === null || i === undefined) { readout.textContent = hint; return; }
          readout.append(element("b", {}, panel.xTitle.split(" (")[0] + " = " + tick(u.data[0][i])));
          for (let s = 1; s < series.length; s++) {
            const value = u.data[s][i];
            if (value === null || value === undefined || u.series[s].show === false || !series[s].label) continue;
            readout.append(" · ", element("span", {}, series[s].label + " ", element("b", {}, short(value))));
          }
        }],
      },
    });
    chart = new uPlot(options(), all, frame);
    if (onClickTime) chart.over.addEventListener("click", () => { const i = chart.cursor.idx; if (i !== null && i !== undefined) onClickTime(chart.data[0][i]); });
    if (onClickTime) frame.addEventListener("keydown", event => { if (event.key === "Enter" && chart.cursor.idx !== null && chart.cursor.idx !== undefined) onClickTime(chart.data[0][chart.cursor.idx]); });
    moveCursorByKeys(frame, () => chart, () => all[0]);
    onVisible.push(() => {
      names.forEach((name, k) => {
        if (name !== null && chart.series[k + 1].show === hidden.has(name)) chart.setSeries(k + 1, { show: !hidden.has(name) });
      });
    });
    redraws.push(() => chart.redraw(false, true));
    if (onClickTime) onTime.push(() => chart.redraw(false, false));
    resizes.push(() => chart.setSize(sizeOf(host, host.clientWidth < 560 ? 260 : 330)));
  }
  function drawTime(u) {
    const x = Math.round(u.valToPos(time, "x", true));
    const { ctx, bbox } = u;
    ctx.save();
    ctx.strokeStyle = css("--accent");
    ctx.lineWidth = 2 * devicePixelRatio;
    ctx.setLineDash([6 * devicePixelRatio, 4 * devicePixelRatio]);
    ctx.beginPath();
    ctx.moveTo(x, bbox.top);
    ctx.lineTo(x, bbox.top + bbox.height);
    ctx.stroke();
    ctx.restore();
  }

  // Rows of a table at one time, by name of the method.
  function indexByTime(table, nameColumn) {
    const at = Object.fromEntries(table.columns.map((name, i) => [name, i]));
    const rows = new Map();
    for (const row of table.rows) {
      const key = row[at.time];
      if (!rows.has(key)) rows.set(key, []);
      rows.get(key).push(Object.fromEntries(table.columns.map((name, i) => [name, row[i]])));
    }
    return { rows: t => rows.get(t) ?? [], name: nameColumn };
  }

  function explorer(host, it) {
    const unit = it.labels;
    const series = indexByTime(it.series, "method");
    const budget = indexByTime(it.budget, "sampler");
    let index = 0;
    const now = () => it.times[index];

    // Time bar.
    const slider = element("input", { type: "range", id: "time", "aria-label": "Time", min: "0", max: String(it.times.length - 1), step: "1", value: "0" });
    const output = element("output", { for: "time", id: "time-shown" });
    const earlier = element("button", { type: "button", "aria-label": "Earlier report time" }, "◀");
    const later = element("button", { type: "button", "aria-label": "Later report time" }, "▶");
    const play = element("button", { type: "button", id: "play", "aria-pressed": "false" }, "Play");
    const go = value => {
      index = Math.max(0, Math.min(it.times.length - 1, value));
      slider.value = String(index);
      const text = "t = " + withUnit(short(now()), unit.time);
      output.textContent = text;
      slider.setAttribute("aria-valuetext", text);
      setTime(now());
    };
    let timer = null;
    const stop = () => { clearInterval(timer); timer = null; play.textContent = "Play"; play.setAttribute("aria-pressed", "false"); };
    slider.addEventListener("input", () => { stop(); go(Number(slider.value)); });
    earlier.addEventListener("click", () => { stop(); go(index - 1); });
    later.addEventListener("click", () => { stop(); go(index + 1); });
    play.addEventListener("click", () => {
      if (timer) { stop(); return; }
      if (index === it.times.length - 1) go(0);
      play.textContent = "Stop";
      play.setAttribute("aria-pressed", "true");
      timer = setInterval(() => { if (index === it.times.length - 1) stop(); else go(index + 1); }, 220);
    });
    goToTime = value => {
      let best = 0;
      it.times.forEach((t, i) => { if (Math.abs(t - value) < Math.abs(it.times[best] - value)) best = i; });
      stop();
      go(best);
    };
    const bar = element("div", { class: "timebar" }, element("label", { for: "time" }, "Time"), earlier, slider, later, play, output);
    const switches = element("fieldset", { class: "switches" }, element("legend", {}, "Shown"));
    for (const method of it.methods) switches.append(switchFor(method.name, method.look));
    // The time stays in sight while what it moves is looked at.
    host.append(bar, switches);

    const stage = element("div", { class: "stage " + it.kind });
    host.append(stage);
    const main = element("div");
    stage.append(main);
    if (it.kind === "line") densityOnALine(main, it, switches, () => index);
    else densityOnAPlane(main, it, switches, () => index);

    // Error budget now.
    const side = element("div");
    if (it.budget.rows.length > 0) {
      side.append(element("h3", {}, "Error budget at this time"));
      const bars = element("div", { class: "budget", id: "budget-now" });
      side.append(bars);
      stage.append(side);
      const at = Object.fromEntries(it.budget.columns.map((name, i) => [name, i]));
      let greatest = 0;
      for (const row of it.budget.rows) {
        for (const name of ["total_w2", "step_bias_w2", "noise_w2_p95"]) greatest = Math.max(greatest, row[at[name]] ?? 0);
      }
      const paint = () => {
        bars.replaceChildren();
        for (const row of budget.rows(now())) {
          if (hidden.has(row.sampler)) continue;
          const caption = element("caption", {}, row.sampler + ": " + row.verdict,
            element("small", {}, "W2" + (unit.length ? " in " + unit.length : "") + (row.p_value !== null ? ", p = " : ""), row.p_value !== null ? element("data", { value: String(row.p_value), "data-column": "p_value" }, short(row.p_value)) : ""));
          const table = element("table", { class: "bars", "data-sampler": row.sampler }, caption);
          const line = (label, name, kind, mark) => {
            if (row[name] === null) return;
            const track = element("span", { class: "track", "aria-hidden": "true" }, element("span", { class: "fill " + kind, style: "width:" + 100 * row[name] / greatest + "%" }));
            if (mark !== undefined && mark !== null) track.append(element("span", { class: "mark", style: "left:" + 100 * mark / greatest + "%" }));
            const value = dataCell(row[name], 4);
            value.dataset.column = name;
            table.append(element("tr", {}, element("th", { scope: "row" }, label), value, element("td", {}, track)));
          };
          line("total", "total_w2", "total", row.noise_w2_p95);
          line("step bias", "step_bias_w2", "bias");
          line("noise, mean", "noise_w2_mean", "noise", row.noise_w2_p95);
          line("noise, 95 %", "noise_w2_p95", "noise");
          line("grid", "grid_w2", "grid");
          bars.append(table);
        }
        if (bars.childElementCount === 0) bars.append(element("p", { class: "lead" }, "No ensemble is switched on."));
      };
      onTime.push(paint);
      onVisible.push(paint);
      side.append(element("p", { class: "lead" }, "The stroke marks the 95 % point of the noise: a total left of it cannot be told from noise."));
    } else stage.classList.remove("line");

    // Readouts now.
    const readouts = element("div", { class: "readouts" });
    host.append(readouts);
    const plane = it.kind === "plane";
    const area = unit.length ? unit.length + "²" : null;
    const columns = [["mean_x", plane ? "mean x" : "mean", unit.length], ["var_x", plane ? "variance x" : "variance", area],
      ...(plane ? [["mean_y", "mean y", unit.length], ["var_y", "variance y", area], ["cov_xy", "covariance", area]] : []),
      ["free_energy", "free energy", unit.energy], ["relative_entropy", "relative entropy", null], ["w2_exact", "W2 to exact", unit.length],
      ...(plane ? [["w2_exact_low", "at least", unit.length], ["w2_exact_high", "at most", unit.length]] : []), ["tv_exact", "total variation", null]];
    const head = element("tr", {}, element("th", { scope: "col" }, "method"));
    for (const [, title, u] of columns) head.append(element("th", { scope: "col", class: "n" }, title, ...(u ? [" ", element("span", { class: "unit" }, u)] : [])));
    const bodyRows = element("tbody");
    readouts.append(element("div", { class: "scroll", tabindex: "0", role: "region", "aria-label": "Readouts at this time" },
      element("table", { id: "readouts-now" }, element("thead", {}, head), bodyRows)));
    const fill = () => {
      bodyRows.replaceChildren();
      for (const row of series.rows(now())) {
        if (hidden.has(row.method)) continue;
        const line = element("tr", { "data-method": row.method }, element("th", { scope: "row" }, row.method));
        for (const [name] of columns) {
          const cell = dataCell(row[name], 4);
          cell.dataset.column = name;
          line.append(cell);
        }
        bodyRows.append(line);
      }
    };
    onTime.push(fill);
    onVisible.push(fill);
    go(Math.min(it.times.length - 1, Math.max(1, Math.round(it.times.length * 0.2))));
  }
  let goToTime = null;

  function densityOnALine(host, it, switches, index) {
    const unit = it.labels;
    const flows = it.methods.filter(m => m.kind === "flow" && it.densities[m.name]);
    const samplers = it.methods.filter(m => it.walkersShown[m.name]);
    switches.append(switchFor("equilibrium", it.equilibrium.look));
    const potentialLook = { color: "#a07f2c", dark: "#c9ad62", width: 1, dash: [] };
    switches.append(switchFor("V", potentialLook));
    const fit = element("input", { type: "checkbox", id: "fit" });
    switches.append(element("label", { class: "overlay" }, fit, "fit height to this time"));
    const least = Math.min(...it.potential);
    // Heights: what comes after the start sets the scale, unless the reader asks for a fit.
    let common = Math.max(...it.equilibrium.values);
    for (const m of flows) it.densities[m.name].forEach((values, k) => { if (k > 0 || it.times.length === 1) for (const v of values) common = Math.max(common, v); });
    const pick = () => [it.x, it.potential, it.equilibrium.values, ...flows.map(m => it.densities[m.name][index()] ?? it.x.map(() => null))];
    // The part of the axis where anything ever happens.
    let [first, last] = [it.x.length - 1, 0];
    for (const values of [it.equilibrium.values, ...flows.flatMap(m => it.densities[m.name])]) {
      const threshold = 1e-3 * Math.max(...values);
      values.forEach((v, i) => { if (v > threshold) { first = Math.min(first, i); last = Math.max(last, i); } });
    }
    const pad = Math.round((last - first) / 14);
    const range = [it.x[Math.max(0, first - pad)], it.x[Math.min(it.x.length - 1, last + pad)]];
    const { frame, readout } = plotFrame(host, "Density against x at the time of the slider: " + flows.map(m => m.name).join(", "));
    frame.id = "density";
    const hint = "Point at the chart, or focus it and use ← and → (with Shift: by ten), for values." + (samplers.length ? " Strokes at the foot are walkers." : "");
    readout.textContent = hint;
    const inUnit = (text, u) => u ? text + " (" + u + ")" : text;
    const series = [{},
      { label: "V", scale: "V", stroke: () => colorOf(potentialLook), width: potentialLook.width, points: { show: false } },
      { label: "equilibrium", stroke: () => colorOf(it.equilibrium.look), width: it.equilibrium.look.width, dash: it.equilibrium.look.dash.map(d => d * it.equilibrium.look.width), points: { show: false } },
      ...flows.map(m => ({ label: m.name, stroke: () => colorOf(m.look), width: m.look.width, dash: m.look.dash.map(d => d * m.look.width), points: { show: false } }))];
    const tall = () => host.clientWidth < 560 ? 300 : 390;
    const chart = new uPlot({
      ...sizeOf(host, tall()),
      legend: { show: false },
      cursor: { drag: { x: false, y: false }, points: { size: 7 }, y: false },
      scales: {
        x: { time: false, range: () => range },
        y: { range: (u, low, high) => [0, 1.05 * (fit.checked ? high ?? common : common)] },
        V: { range: () => [least, least + 12 * it.temperature] },
      },
      axes: [axis(inUnit("x", unit.length), false, { size: 34 }), axis(inUnit("density", unit.density), false, { size: 56 }),
        axis(inUnit("V", unit.energy), false, { scale: "V", side: 1, size: 50, grid: { show: false } })],
      series,
      hooks: {
        draw: [u => {
          samplers.filter(m => !hidden.has(m.name)).forEach((m, row) => {
            const { ctx, bbox } = u;
            const foot = bbox.top + bbox.height - (3 + 10 * row) * devicePixelRatio;
            ctx.save();
            ctx.strokeStyle = colorOf(m.look);
            ctx.globalAlpha = 0.55;
            ctx.lineWidth = devicePixelRatio;
            ctx.beginPath();
            for (const x of it.walkersShown[m.name].x[index()] ?? []) {
              if (x < range[0] || x > range[1]) continue;
              const at = Math.round(u.valToPos(x, "x", true));
              ctx.moveTo(at, foot);
              ctx.lineTo(at, foot - 8 * devicePixelRatio);
            }
            ctx.stroke();
            ctx.restore();
          });
        }],
        setCursor: [u => {
          const i = u.cursor.idx;
          readout.replaceChildren();
          if (i === null || i === undefined) { readout.textContent = hint; return; }
          readout.append(element("b", {}, "x = " + withUnit(short(u.data[0][i]), unit.length)));
          for (let s = 1; s < series.length; s++) {
            if (u.series[s].show === false || u.data[s][i] === null) continue;
            readout.append(" · ", element("span", {}, series[s].label + " ", element("b", {}, short(u.data[s][i]))));
          }
        }],
      },
    }, pick(), frame);
    moveCursorByKeys(frame, () => chart, () => it.x);
    const show = () => {
      series.forEach((s, k) => { if (k > 0 && chart.series[k].show === hidden.has(s.label)) chart.setSeries(k, { show: !hidden.has(s.label) }); });
      chart.redraw(false, false);
    };
    show();
    onVisible.push(show);
    onTime.push(() => chart.setData(pick(), true));
    fit.addEventListener("change", () => chart.setData(pick(), true));
    redraws.push(() => chart.redraw(false, true));
    resizes.push(() => chart.setSize(sizeOf(host, tall())));
  }

  function densityOnAPlane(host, it, switches, index) {
    const unit = it.labels;
    const [left, right, lower, upper] = it.extent;
    const [blockX, blockY] = it.block;
    const { nx, ny } = it;
    const flows = it.methods.filter(m => m.kind === "flow" && it.densities[m.name]);
    const samplers = it.methods.filter(m => it.walkersShown[m.name]).map(m => m.name);
    const levelBox = element("input", { type: "checkbox", id: "levels" });
    levelBox.checked = true;
    const walkerChoice = element("select", { id: "walkers", "aria-label": "Walkers over the maps" }, element("option", { value: "" }, "no walkers"));
    for (const name of samplers) walkerChoice.append(element("option", { value: name }, name + " walkers"));
    if (samplers.length > 0) walkerChoice.value = samplers[0];
    const mapChoice = element("select", { id: "map", "aria-label": "Transport map over the maps" }, element("option", { value: "" }, "no transport map"));
    it.transport.forEach((map, k) => mapChoice.append(element("option", { value: String(k) }, "map: " + map.title)));
    switches.append(element("label", { class: "overlay" }, levelBox, "level lines of V"));
    if (samplers.length > 0) switches.append(element("span", { class: "overlay" }, walkerChoice));
    if (it.transport.length > 0) switches.append(element("span", { class: "overlay" }, mapChoice));

    // Maps are stored as 16-bit steps of their greatest value.
    const decoded = new Map();
    function values(name, k) {
      const stored = it.densities[name][k];
      if (!stored) return null;
      const key = name + "/" + k;
      if (!decoded.has(key)) {
        const text = atob(stored.data);
        const map = new Float64Array(text.length / 2);
        for (let i = 0; i < map.length; i++) map[i] = (text.charCodeAt(2 * i) + 256 * text.charCodeAt(2 * i + 1)) / 65535 * stored.max;
        decoded.set(key, map);
      }
      return decoded.get(key);
    }
    const greatest = () => Math.max(...flows.map(m => it.densities[m.name][index()]?.max ?? 0));

    // Level lines by marching squares, once.
    const centerX = i => left + (i + 0.5) * blockX;
    const centerY = j => lower + (j + 0.5) * blockY;
    const segments = [];
    for (const level of it.levels) {
      for (let j = 0; j + 1 < ny; j++) {
        for (let i = 0; i + 1 < nx; i++) {
          const corners = [[i, j], [i + 1, j], [i + 1, j + 1], [i, j + 1]].map(([a, b]) => [centerX(a), centerY(b), it.potential[b * nx + a] - level]);
          const cuts = [];
          for (let k = 0; k < 4; k++) {
            const [p, q] = [corners[k], corners[(k + 1) % 4]];
            if ((p[2] < 0) !== (q[2] < 0)) {
              const s = p[2] / (p[2] - q[2]);
              cuts.push([p[0] + s * (q[0] - p[0]), p[1] + s * (q[1] - p[1])]);
            }
          }
          for (let k = 0; k + 1 < cuts.length; k += 2) segments.push([cuts[k], cuts[k + 1]]);
        }
      }
    }

    const stops = () => (isDark() ? it.mapColorsDark : it.mapColors).map(c => [1, 3, 5].map(at => parseInt(c.slice(at, at + 2), 16)));
    function palette() {
      const colors = stops();
      return Array.from({ length: 256 }, (_, k) => {
        const at = k / 255 * (colors.length - 1);
        const low = Math.min(colors.length - 2, Math.floor(at));
        return [0, 1, 2].map(c => colors[low][c] + (at - low) * (colors[low + 1][c] - colors[low][c]));
      });
    }

    const scale = element("div", { class: "scale" });
    const ramp = element("canvas", { width: "160", height: "14", "aria-hidden": "true" });
    const zero = element("span", {}, "density 0");
    const top = element("span", { id: "scale-top" });
    scale.append(zero, ramp, top);
    const maps = element("div", { class: "maps" });
    const readout = element("p", { class: "readout", id: "map-readout" });
    const hint = "Point at a map, or focus one and use the arrow keys, for values. Lines: V at " + it.levelsInTemperature.join(", ") + " T above its least value.";
    host.append(scale, maps, readout);
    let pointer = null;
    const canvases = flows.map(m => {
      const canvas = element("canvas", { tabindex: "0", role: "img", "aria-describedby": "map-readout", "data-map": m.name, "aria-label": "Density map of " + m.name + " at the time of the slider" });
      const figure = element("figure", {}, element("figcaption", {}, m.name), canvas);
      maps.append(figure);
      const at = event => {
        const box = canvas.getBoundingClientRect();
        const area = plotArea(canvas);
        const x = left + (event.clientX - box.left - area.left) / area.width * (right - left);
        const y = upper - (event.clientY - box.top - area.top) / area.height * (upper - lower);
        pointer = x >= left && x <= right && y >= lower && y <= upper ? [x, y] : null;
        draw();
      };
      canvas.addEventListener("pointermove", at);
      canvas.addEventListener("pointerleave", () => { pointer = null; draw(); });
      canvas.addEventListener("focus", () => readout.setAttribute("aria-live", "polite"));
      canvas.addEventListener("blur", () => readout.removeAttribute("aria-live"));
      canvas.addEventListener("keydown", event => {
        const step = event.shiftKey ? 10 : 1;
        const move = { ArrowLeft: [-step, 0], ArrowRight: [step, 0], ArrowUp: [0, step], ArrowDown: [0, -step] }[event.key];
        if (event.key === "Escape") pointer = null;
        else if (!move) return;
        else {
          const [x, y] = pointer ?? [(left + right) / 2, (lower + upper) / 2];
          pointer = [Math.min(right, Math.max(left, x + move[0] * blockX)), Math.min(upper, Math.max(lower, y + move[1] * blockY))];
        }
        event.preventDefault();
        draw();
      });
      return { method: m, canvas, figure };
    });
    const shape = Math.min(1.2, Math.max(0.4, (upper - lower) / (right - left)));
    const plotArea = canvas => ({ left: 46, top: 8, width: canvas.clientWidth - 56, height: (canvas.clientWidth - 56) * shape });
    const image = element("canvas", { width: String(nx), height: String(ny) });

    function niceTicks(from, to, most) {
      const raw = (to - from) / most;
      const power = 10 ** Math.floor(Math.log10(raw));
      const step = [1, 2, 5, 10].map(f => f * power).find(s => s >= raw);
      const out = [];
      for (let v = Math.ceil(from / step) * step; v <= to + 1e-9 * step; v += step) out.push(Math.abs(v) < 1e-9 * step ? 0 : v);
      return out;
    }

    function drawMap({ method, canvas }, colors, high) {
      const area = plotArea(canvas);
      const tall = area.height + 52;
      const ratio = devicePixelRatio || 1;
      canvas.style.height = tall + "px";
      canvas.width = Math.round(canvas.clientWidth * ratio);
      canvas.height = Math.round(tall * ratio);
      const ctx = canvas.getContext("2d");
      ctx.scale(ratio, ratio);
      const px = x => area.left + (x - left) / (right - left) * area.width;
      const py = y => area.top + (upper - y) / (upper - lower) * area.height;
      const map = values(method.name, index());
      ctx.save();
      ctx.beginPath();
      ctx.rect(area.left, area.top, area.width, area.height);
      ctx.clip();
      if (map) {
        const small = image.getContext("2d");
        const pixels = small.createImageData(nx, ny);
        for (let j = 0; j < ny; j++) {
          for (let i = 0; i < nx; i++) {
            const color = colors[Math.min(255, Math.max(0, Math.round(map[j * nx + i] / high * 255)))];
            pixels.data.set([color[0], color[1], color[2], 255], 4 * ((ny - 1 - j) * nx + i));
          }
        }
        small.putImageData(pixels, 0, 0);
        ctx.imageSmoothingEnabled = true;
        const [x0, x1, y0, y1] = [px(left), px(left + nx * blockX), py(lower + ny * blockY), py(lower)];
        ctx.drawImage(image, x0, y0, x1 - x0, y1 - y0);
      } else {
        ctx.fillStyle = css("--muted");
        ctx.font = font();
        ctx.fillText("not reached", area.left + 12, area.top + 24);
      }
      if (levelBox.checked) {
        ctx.strokeStyle = css("--level");
        ctx.lineWidth = 0.9;
        ctx.beginPath();
        for (const [p, q] of segments) { ctx.moveTo(px(p[0]), py(p[1])); ctx.lineTo(px(q[0]), py(q[1])); }
        ctx.stroke();
      }
      if (walkerChoice.value && !hidden.has(walkerChoice.value)) {
        const walkers = it.walkersShown[walkerChoice.value];
        const [xs, ys] = [walkers.x[index()] ?? [], walkers.y[index()] ?? []];
        ctx.fillStyle = css("--walker");
        ctx.globalAlpha = 0.8;
        xs.forEach((x, k) => { ctx.beginPath(); ctx.arc(px(x), py(ys[k]), 1.5, 0, 2 * Math.PI); ctx.fill(); });
        ctx.globalAlpha = 1;
      }
      const transport = it.transport[Number(mapChoice.value)];
      if (mapChoice.value !== "" && transport && (transport.method === method.name || !it.densities[transport.method])) {
        ctx.strokeStyle = ctx.fillStyle = css("--walker");
        ctx.lineWidth = 1.2;
        for (let k = 0; k < transport.arrows.length; k += 4) {
          const [ax, ay, bx, by] = [px(transport.arrows[k]), py(transport.arrows[k + 1]), px(transport.arrows[k + 2]), py(transport.arrows[k + 3])];
          const length = Math.hypot(bx - ax, by - ay);
          if (length < 1) continue;
          const [ux, uy] = [(bx - ax) / length, (by - ay) / length];
          const headLength = Math.min(6, length);
          ctx.beginPath();
          ctx.moveTo(ax, ay);
          ctx.lineTo(bx - ux * headLength * 0.8, by - uy * headLength * 0.8);
          ctx.stroke();
          ctx.beginPath();
          ctx.moveTo(bx, by);
          ctx.lineTo(bx - ux * headLength - uy * headLength * 0.45, by - uy * headLength + ux * headLength * 0.45);
          ctx.lineTo(bx - ux * headLength + uy * headLength * 0.45, by - uy * headLength - ux * headLength * 0.45);
          ctx.fill();
        }
      }
      if (pointer) {
        ctx.strokeStyle = css("--accent");
        ctx.lineWidth = 1;
        ctx.setLineDash([4, 3]);
        ctx.beginPath();
        ctx.moveTo(px(pointer[0]), area.top);
        ctx.lineTo(px(pointer[0]), area.top + area.height);
        ctx.moveTo(area.left, py(pointer[1]));
        ctx.lineTo(area.left + area.width, py(pointer[1]));
        ctx.stroke();
      }
      ctx.restore();
      ctx.strokeStyle = css("--muted");
      ctx.strokeRect(area.left, area.top, area.width, area.height);
      ctx.fillStyle = css("--ink");
      ctx.font = font();
      ctx.textAlign = "center";
      for (const v of niceTicks(left, right, 5)) {
        ctx.fillRect(px(v) - 0.5, area.top + area.height, 1, 4);
        ctx.fillText(tick(v), px(v), area.top + area.height + 17);
      }
      ctx.fillText("x" + (unit.length ? " (" + unit.length + ")" : ""), area.left + area.width / 2, area.top + area.height + 36);
      ctx.textAlign = "right";
      for (const v of niceTicks(lower, upper, 4)) {
        ctx.fillRect(area.left - 4, py(v) - 0.5, 4, 1);
        ctx.fillText(tick(v), area.left - 7, py(v) + 4);
      }
      ctx.save();
      ctx.translate(13, area.top + area.height / 2);
      ctx.rotate(-Math.PI / 2);
      ctx.textAlign = "center";
      ctx.fillText("y" + (unit.length ? " (" + unit.length + ")" : ""), 0, 0);
      ctx.restore();
    }

    function draw() {
      const colors = palette();
      const high = greatest() || 1;
      const rampContext = ramp.getContext("2d");
      for (let k = 0; k < 160; k++) {
        rampContext.fillStyle = "rgb(" + colors[Math.round(k / 159 * 255)].map(Math.round).join(",") + ")";
        rampContext.fillRect(k, 0, 1, 14);
      }
      top.textContent = withUnit(short(high), unit.density) + ", the greatest of all methods at this time";
      for (const entry of canvases) {
        entry.figure.hidden = hidden.has(entry.method.name);
        if (!entry.figure.hidden) drawMap(entry, colors, high);
      }
      readout.replaceChildren();
      if (!pointer) { readout.textContent = hint; return; }
      const i = Math.min(nx - 1, Math.max(0, Math.floor((pointer[0] - left) / blockX)));
      const j = Math.min(ny - 1, Math.max(0, Math.floor((pointer[1] - lower) / blockY)));
      readout.append(element("b", {}, "x = " + withUnit(short(pointer[0], 3), unit.length) + ", y = " + withUnit(short(pointer[1], 3), unit.length)),
        " · ", element("span", {}, "V ", element("b", {}, short(it.potential[j * nx + i]))));
      for (const { method } of canvases) {
        const map = values(method.name, index());
        if (map && !hidden.has(method.name)) readout.append(" · ", element("span", {}, method.name + " ", element("b", {}, short(map[j * nx + i]))));
      }
    }
    for (const input of [levelBox, walkerChoice, mapChoice]) input.addEventListener("change", draw);
    // Arrows start from the density of their own time: go there.
    mapChoice.addEventListener("change", () => { if (mapChoice.value !== "") goToTime(it.transport[Number(mapChoice.value)].from); });
    onTime.push(draw);
    onVisible.push(draw);
    redraws.push(draw);
    resizes.push(draw);
  }

  // Build: explorers first, since their methods rule the other charts.
  for (const host of document.querySelectorAll("[data-explorer]")) explorer(host, data.explorers[host.dataset.explorer]);
  for (const host of document.querySelectorAll("[data-chart]")) {
    const panel = data.charts[host.dataset.chart];
    const entries = panel.curves.filter(c => c.label);
    const legend = element("fieldset", { class: "switches" }, element("legend", {}, "Shown"));
    for (const curve of entries) legend.append(switchFor(curve.label, curve.look));
    for (const band of panel.bands) {
      const swatch = element("span", { "aria-hidden": "true", style: "display:inline-block;width:34px;height:12px;background:var(--band)" });
      legend.append(element("label", {}, swatch, band.label));
    }
    host.append(legend);
    const overTime = goToTime && panel.xTitle.startsWith("time");
    lineChart(host, panel, overTime ? goToTime : null);
  }
  if (time !== null) setTime(time);

  let width = document.documentElement.clientWidth;
  const refit = () => { for (const resize of resizes) resize(); };
  addEventListener("resize", () => {
    if (document.documentElement.clientWidth === width) return;
    width = document.documentElement.clientWidth;
    refit();
  });
  addEventListener("beforeprint", () => {
    printing = true;
    applyTheme();
    document.querySelector("main").style.width = "680px";
    refit();
  });
  addEventListener("afterprint", () => {
    printing = false;
    document.querySelector("main").style.width = "";
    applyTheme();
    refit();
  });
  root.dataset.ready = "true";
})();
