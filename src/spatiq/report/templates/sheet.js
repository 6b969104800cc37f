"use strict";
// Draws the page's figures from the data that it carries. Colours come from the style sheet, so
// that light, dark and print look alike; what is out of sight is drawn when it comes near.
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const plots = new Map(data.plots.map((plot) => [plot.key, plot]));
  const drawn = new Map();
  const SHAPES = ["circle", "cross", "square", "diamond", "triangle-up", "x", "star", "pentagon"];
  const DASHES = ["solid", "dash", "dot", "dashdot", "longdash", "longdashdot"];
  const CONFIG = { displayModeBar: false, responsive: false, displaylogo: false };
  let printing = false;

  function colour(name) {
    return getComputedStyle(document.documentElement).getPropertyValue(name).trim();
  }

  function hue(index) {
    return colour(`--h${index % 8}`);
  }

  function plain(text) {
    return text.replaceAll("&", "&amp;").replaceAll("<", "&lt;").replaceAll(">", "&gt;");
  }

  function trace(series, panel, id) {
    const tone = hue(series.hue);
    const out = {
      type: "scatter", x: series.x || [], y: series.y || [], name: series.name,
      showlegend: Boolean(series.name) && !panel.y_names.length && (series.y || []).some((v) => v !== null),
      xaxis: `x${id}`, yaxis: `y${id}`, customdata: series.frames,
      mode: "markers", cliponaxis: true,
      marker: { color: tone, size: 6, symbol: SHAPES[series.hue % 8] },
      hovertemplate: `%{x}, %{y}${series.frames ? ", frame %{customdata}" : ""}<extra></extra>`,
    };
    if (series.kind === "line") {
      Object.assign(out, { mode: "lines", line: { color: tone, width: 1.6, dash: DASHES[series.hue % 6] } });
    } else if (series.kind === "bounds") {
      out.marker = { color: tone, size: 8, symbol: "triangle-down-open" };
    } else if (series.kind === "cloud") {
      out.marker = { color: tone, size: 3, opacity: 0.55 };
    } else if (series.kind === "density") {
      out.marker = { symbol: "square", size: 4, color: series.weights.map(Math.log10), colorscale: [[0, colour("--few")], [1, colour("--many")]] };
      out.text = series.weights.map(String);
      out.hovertemplate = "%{text} symbols<extra></extra>";
    }
    if (panel.square && series.kind === "points" && !series.labels && !panel.links.length) {
      out.marker = { color: tone, size: 10, symbol: "cross-thin", line: { color: tone, width: 2 } };
    }
    if (series.labels) {
      Object.assign(out, { mode: "markers+text", text: series.labels, textposition: "top center", textfont: { size: 10 } });
    }
    if (series.hints) {
      // Named by %{text}: hover text would take markup for what it is, so it is defused.
      out.text = series.hints.map(plain);
      out.hovertemplate = "%{text}<br>%{x}, %{y}<extra></extra>";
    }
    if (series.low && series.high) {
      out.error_y = {
        type: "data", symmetric: false, color: tone, thickness: 1, width: 0,
        array: series.high.map((v, i) => v - series.y[i]),
        arrayminus: series.low.map((v, i) => series.y[i] - v),
      };
    }
    return out;
  }

  function heat(matrix, id) {
    return {
      type: "heatmap", x: matrix.columns, y: matrix.rows, z: matrix.values,
      text: matrix.texts.map((row) => row.map((t) => t.replace("\n", "<br>"))),
      texttemplate: matrix.texts[0] && matrix.texts[0][0] !== "" ? "%{text}" : "",
      hovertemplate: "sent %{y}, decided %{x}: %{text}<extra></extra>",
      xaxis: `x${id}`, yaxis: `y${id}`, zmin: matrix.low, zmax: 0, colorscale: "Cividis",
      showscale: false, hoverongaps: false, xgap: 1, ygap: 1,
    };
  }

  // Whole decades only, where there are several: a low panel has no room for more.
  function decades(panel) {
    const all = panel.series.flatMap((s) => s.y || []).filter((v) => v > 0);
    return all.length && Math.max(...all) > 30 * Math.min(...all) ? 1 : undefined;
  }

  // Height that the legend takes: the drawing area must not pay for it.
  function legendHeight(traces, width) {
    const names = traces.filter((t) => t.showlegend).map((t) => t.name);
    if (!names.length) return 0;
    const abreast = Math.max(1, Math.floor(width / (60 + 7 * Math.max(...names.map((n) => n.length)))));
    return 20 * Math.ceil(names.length / abreast);
  }

  function axis(title, log, box) {
    return {
      title: { text: title, font: { size: 12 }, standoff: 6 }, type: log ? "log" : undefined,
      exponentformat: "power", showline: true, linecolor: colour("--faint"), ticks: "outside",
      tickcolor: colour("--faint"), gridcolor: colour("--rule"), zeroline: false, domain: box,
      automargin: false, tickfont: { size: 11 }, nticks: 7,
    };
  }

  // Places panels in rows: pixels first, shares of the drawing area from them.
  function places(plot, width) {
    const narrow = width < 620;
    const squares = plot.panels.every((p) => p.square);
    let abreast = narrow ? (squares && plot.abreast > 2 ? 2 : 1) : plot.abreast;
    abreast = Math.min(abreast, plot.panels.length);
    const rows = Math.ceil(plot.panels.length / abreast);
    const left = narrow ? 64 : 70;
    const gapX = narrow ? 44 : 70;
    const gapY = plot.shared_x ? 14 : 78;
    const cell = (width - left - 16 - gapX * (abreast - 1)) / abreast;
    const heights = [];
    for (let r = 0; r < rows; r += 1) {
      const panel = plot.panels[r * abreast];
      let high = plot.shared_x ? 150 : 300;
      if (panel.y_names.length) high = 26 + 18 * panel.y_names.length;
      if (panel.square) high = Math.min(cell, 460);
      heights.push(high);
    }
    const inner = heights.reduce((a, b) => a + b, 0) + gapY * (rows - 1);
    const boxes = plot.panels.map((panel, i) => {
      const r = Math.floor(i / abreast);
      const c = i % abreast;
      const above = heights.slice(0, r).reduce((a, b) => a + b, 0) + gapY * r;
      const total = cell * abreast + gapX * (abreast - 1);
      const x0 = (cell + gapX) * c / total;
      const wide = panel.square ? Math.min(cell, heights[r]) : cell;
      return {
        x: [x0, x0 + wide / total],
        y: [1 - (above + heights[r]) / inner, 1 - above / inner],
        last: r === rows - 1,
      };
    });
    return { boxes, inner, left };
  }

  function figure(plot, width) {
    const { boxes, inner, left } = places(plot, width);
    const traces = [];
    const titled = plot.panels.some((p) => p.title);
    const layout = {
      width, margin: { l: left, r: 16, t: 14, b: 56 },
      paper_bgcolor: "rgba(0,0,0,0)", plot_bgcolor: "rgba(0,0,0,0)",
      font: { color: colour("--ink"), family: "Liberation Sans, DejaVu Sans, system-ui, sans-serif" },
      legend: { orientation: "h", x: 0, y: 1, yanchor: "bottom", font: { size: 12 } },
      hovermode: "closest", dragmode: "zoom", annotations: [], shapes: [],
      hoverlabel: { bgcolor: colour("--band"), font: { color: colour("--ink") } },
    };
    plot.panels.forEach((panel, i) => {
      const id = i ? String(i + 1) : "";
      panel.series.forEach((series) => traces.push(trace(series, panel, id)));
      const across = axis(plot.shared_x && !boxes[i].last ? "" : panel.x_title, panel.log_x, boxes[i].x);
      const up = axis(panel.y_title, panel.log_y, boxes[i].y);
      if (panel.log_y) up.dtick = decades(panel);
      across.anchor = `y${id}`;
      up.anchor = `x${id}`;
      if (panel.dates) across.type = "date";
      if (plot.shared_x) {
        if (i) across.matches = "x";
        across.showticklabels = boxes[i].last;
      }
      if (panel.x_names.length) {
        Object.assign(across, { tickvals: panel.x_names.map((_, k) => k), ticktext: panel.x_names, range: [-0.6, panel.x_names.length - 0.4], showgrid: false });
      }
      if (panel.y_names.length) {
        const names = panel.y_names.map((n) => (n.length > 11 ? n.replace(" ", "<br>") : n));
        Object.assign(up, { title: { text: "" }, tickvals: names.map((_, k) => -k), ticktext: names, range: [0.6 - names.length, 0.6], showgrid: false, tickfont: { size: 9 } });
      }
      if (panel.matrix) {
        traces.push(heat(panel.matrix, id));
        Object.assign(across, { type: "category", showgrid: false, nticks: 0 });
        Object.assign(up, { type: "category", autorange: "reversed", showgrid: false, nticks: 0 });
      } else if (panel.square) {
        Object.assign(up, { scaleanchor: `x${id}`, constrain: "domain", nticks: 5 });
        Object.assign(across, { constrain: "domain", nticks: 5 });
        if (panel.reach) across.range = up.range = [-panel.reach, panel.reach];
      }
      panel.links.forEach(([x0, y0, x1, y1]) => layout.shapes.push({
        type: "line", x0, y0, x1, y1, xref: `x${id}`, yref: `y${id}`, line: { color: hue(1), width: 2, dash: "dot" },
      }));
      if (panel.title) {
        layout.annotations.push({
          text: panel.title, showarrow: false, xref: "paper", yref: "paper", font: { size: 13 },
          x: boxes[i].x[0], y: boxes[i].y[1], xanchor: "left", yanchor: "bottom", yshift: 4,
        });
      }
      layout[`xaxis${id}`] = across;
      layout[`yaxis${id}`] = up;
    });
    layout.showlegend = traces.some((t) => t.showlegend);
    layout.margin.t += legendHeight(traces, width - left) + (titled ? 24 : 0);
    layout.legend.yref = "paper";
    layout.legend.y = 1 + (titled ? 24 : 4) / inner;
    layout.height = inner + layout.margin.t + layout.margin.b;
    return { traces, layout };
  }

  function draw(canvas, plot) {
    const width = printing ? 660 : canvas.clientWidth;
    const { traces, layout } = figure(plot, width);
    drawn.set(canvas, plot);
    canvas.style.minHeight = `${layout.height}px`;
    const done = Plotly.react(canvas, traces, layout, CONFIG);
    if (plot.pick && !canvas.dataset.picks) {
      canvas.dataset.picks = "yes";
      canvas.on("plotly_click", (event) => {
        const frame = event.points[0].customdata;
        if (frame !== undefined) {
          choose(frame);
          document.getElementById("one").scrollIntoView();
        }
      });
    }
    return done;
  }

  function redraw() {
    drawn.forEach((plot, canvas) => draw(canvas, plot));
  }

  // One frame: its figures, its confusions, its symbols and phase.
  const frames = data.frames;
  const picker = document.getElementById("frame");

  function nearest(frame) {
    let best = 0;
    frames.frames.forEach((f, i) => {
      if (Math.abs(f - frame) < Math.abs(frames.frames[best] - frame)) best = i;
    });
    return best;
  }

  function cellRow(body, cells) {
    const row = body.insertRow();
    cells.forEach((text, i) => {
      const cell = row.insertCell();
      cell.textContent = text;
      if (i === 1) cell.className = "n";
    });
  }

  function choose(wanted) {
    const at = nearest(wanted);
    const frame = frames.frames[at];
    picker.value = frame;
    const body = document.querySelector("#one-table tbody");
    body.replaceChildren();
    frames.columns.forEach((column) => {
      const value = frames.values[column.name][at];
      const shown = column.name === "marks" ? frames.marks[at] || "none" : value === null ? "-" : String(value);
      cellRow(body, [column.name, shown, column.unit, column.meaning]);
    });
    (frames.confused[frame] || []).forEach(([sent, decided, n]) => {
      cellRow(body, [`antenna ${frames.sets[sent]} taken for ${frames.sets[decided]}`, String(n), "symbol periods", "confusion in this frame"]);
    });
    const near = frame === Number(wanted) ? "" : ` Frame ${wanted} is not among those that the page carries; this is the nearest.`;
    const kept = frames.symbols[frame];
    const symbols = kept ? "" : " Its symbols are not on this page.";
    document.getElementById("told").textContent = `Frame ${frame} of ${frames.total}.${near}${symbols}`;
    picture(kept);
  }

  function picture(kept) {
    const canvas = document.getElementById("one-canvas");
    if (!kept) {
      if (drawn.delete(canvas)) Plotly.purge(canvas);
      canvas.style.minHeight = "0";
      return;
    }
    const blank = { title: "", log_x: false, log_y: false, square: false, dates: false, links: [], x_names: [], y_names: [] };
    draw(canvas, {
      key: "one", abreast: 2, shared_x: false,
      panels: [
        { ...blank, x_title: "I", y_title: "Q", square: true, series: [{ name: "", kind: "cloud", hue: 0, x: kept.i, y: kept.q }] },
        { ...blank, x_title: "payload word", y_title: "phase, degrees", series: [{ name: "", kind: "line", hue: 0, x: kept.word, y: kept.phase_deg }] },
      ],
    });
  }

  function step(by) {
    const at = nearest(Number(picker.value)) + by;
    if (at >= 0 && at < frames.frames.length) choose(frames.frames[at]);
  }

  function worst() {
    const errors = frames.values.bit_errors;
    return frames.frames[errors.indexOf(Math.max(...errors))];
  }

  if (picker) {
    document.getElementById("before").addEventListener("click", () => step(-1));
    document.getElementById("after").addEventListener("click", () => step(1));
    document.getElementById("worst").addEventListener("click", () => choose(worst()));
    picker.addEventListener("change", () => choose(Number(picker.value)));
  }

  const canvases = [...document.querySelectorAll("[data-plot]")];
  canvases.forEach((canvas) => {
    const plot = plots.get(canvas.dataset.plot);
    canvas.style.minHeight = `${figure(plot, canvas.clientWidth).layout.height}px`;
  });
  const watch = new IntersectionObserver((entries) => {
    entries.filter((e) => e.isIntersecting).forEach((e) => {
      watch.unobserve(e.target);
      if (e.target.id === "one") choose(worst());
      else if (!drawn.has(e.target)) draw(e.target, plots.get(e.target.dataset.plot));
    });
  }, { rootMargin: "300px" });
  canvases.forEach((canvas) => watch.observe(canvas));
  if (picker) watch.observe(document.getElementById("one"));

  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", redraw);
  let width = innerWidth;
  addEventListener("resize", () => {
    if (innerWidth !== width && !printing) {
      width = innerWidth;
      redraw();
    }
  });
  addEventListener("beforeprint", () => {
    printing = true;
    canvases.forEach((canvas) => draw(canvas, plots.get(canvas.dataset.plot)));
    if (picker && !picker.value) choose(worst());
    redraw();
  });
  addEventListener("afterprint", () => {
    printing = false;
    redraw();
  });
})();
