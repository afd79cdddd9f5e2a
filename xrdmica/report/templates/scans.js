"use strict";
(function () {
  var plot = document.getElementById("plot"), source = document.getElementById("curves");
  if (!plot || !source) { return; }
  var data = JSON.parse(source.textContent), printing = false, range = null, drawn = false;
  var bench = document.getElementById("bench"), box = document.getElementById("which-scans");
  data.scans.forEach(function (scan, k) {
    var label = document.createElement("label"), input = document.createElement("input");
    input.type = "checkbox"; input.name = "scan"; input.value = String(k); input.checked = true;
    label.appendChild(input);
    label.appendChild(document.createTextNode(" " + scan.scan.replace(/_/g, " ")));
    box.appendChild(label);
  });
  var dashes = { solid: "", dash: "5 2.5", dot: "1.5 2", dashdot: "6 2 1.5 2", longdashdot: "8 2 1.5 2" };
  data.phases.forEach(function (phase) {
    document.querySelectorAll("line[data-phase]").forEach(function (line) {
      if (line.getAttribute("data-phase") === phase.id && dashes[phase.dash]) { line.setAttribute("stroke-dasharray", dashes[phase.dash]); }
    });
  });
  function on(name) {
    return Array.from(document.querySelectorAll("input[name='" + name + "']:checked")).map(function (i) { return i.value; });
  }
  function colour(name) { return getComputedStyle(document.documentElement).getPropertyValue(name).trim(); }
  function isDark() {
    if (printing) { return false; }
    var chosen = document.documentElement.getAttribute("data-theme");
    return chosen ? chosen === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
  }
  function safe(text) { return String(text).replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;"); }
  function scaler(scale) {
    if (scale === "linear") { return function (v) { return v; }; }
    if (scale === "log") { return function (v) { return Math.log10(Math.max(v, 1)); }; }
    return function (v) { return v < 0 ? -Math.sqrt(-v) : Math.sqrt(v); };
  }
  function ticks(scale, low, high) {
    var f = scaler(scale), kept = [], values = [0], k, m;
    for (k = 0; k < 8; k++) { for (m of [1, 2, 5]) { values.push(m * Math.pow(10, k)); } }
    if (scale === "linear") {
      var step = Math.pow(10, Math.floor(Math.log10(Math.max(high, 1)))), n;
      step = high / step >= 5 ? 2 * step : high / step >= 2 ? step : step / 2;
      values = [];
      for (n = 0; n * step <= high; n++) { values.push(n * step); }
    }
    values.forEach(function (v) {
      var at = f(v);
      if (scale === "log" && v < 1) { return; }
      if (at >= low && at <= high && (!kept.length || at - f(kept[kept.length - 1]) > 0.16 * (high - low))) { kept.push(v); }
    });
    return { at: kept.map(f), text: kept.map(function (v) { return v >= 10000 ? v / 1000 + "k" : String(v); }) };
  }
  function spacing(scan, angle) {
    return scan.wavelength ? scan.wavelength / (2 * Math.sin(angle * Math.PI / 360)) : null;
  }
  var names = {};
  data.phases.forEach(function (p) { names[p.id] = p.name; });
  function words(scan, angle, count) {
    var d = spacing(scan, angle), best = null;
    scan.marks.forEach(function (m) {
      var away = Math.abs(m[2] - angle);
      if (away < 0.4 && (!best || away < Math.abs(best[2] - angle))) { best = m; }
    });
    return "<b>" + safe(scan.scan.replace(/_/g, " ")) + "</b><br>2θ " + angle.toFixed(2) + "°" +
      (d ? "   d " + d.toFixed(3) + " Å" : "") + "<br>intensity " + count +
      (best ? "<br>near " + safe(names[best[0]] || best[0]) + " " + safe(best[1]) + ", d " + best[3].toFixed(3) + " Å" : "");
  }
  var inks = { light: ["#22262b", "#0b6e8a", "#b3541e", "#6a3d9a", "#5b6b12", "#8a1c4a"],
               dark: ["#e8e6df", "#63c3dd", "#f2a06b", "#c3a3ee", "#bfd05c", "#f08ab5"] };
  var rows = ["solid", "dash", "dot", "dashdot", "longdash", "longdashdot"];
  function build() {
    var dark = isDark(), overlaid = on("arrange")[0] === "overlaid", scale = on("scale")[0], f = scaler(scale);
    var curves = on("curve"), phases = on("phase"), scans = on("scan").map(Number), traces = [];
    var ink = dark ? "#e8e6df" : "#22262b", soft = dark ? "#a9b0b8" : "#565d66", rule = dark ? "#3a4148" : "#dedacf";
    var n = overlaid ? 1 : Math.max(scans.length, 1), residual = curves.indexOf("residual") >= 0;
    var narrow = plot.clientWidth < 560 && !printing;
    var layout = {
      paper_bgcolor: "rgba(0,0,0,0)", plot_bgcolor: "rgba(0,0,0,0)", showlegend: false, hovermode: "closest", autosize: false,
      font: { family: 'system-ui,"Noto Sans","Liberation Sans",sans-serif', size: printing ? 9 : 12, color: ink },
      width: printing ? 690 : plot.clientWidth, height: printing ? 520 : overlaid ? 520 : Math.max(300, 205 * n + 70),
      margin: { l: narrow ? 38 : 56, r: narrow ? 10 : 18, t: 34, b: 44 }, dragmode: on("drag")[0] || "zoom",
      hoverlabel: { bgcolor: dark ? "#23292e" : "#ffffff", bordercolor: soft, font: { color: ink }, align: "left" }, annotations: []
    };
    var first = Infinity, last = -Infinity;
    scans.forEach(function (k) { var x = data.scans[k].x; first = Math.min(first, x[0]); last = Math.max(last, x[x.length - 1]); });
    if (!scans.length) { first = 2; last = 40; }
    layout.xaxis = { range: range || [first, last], title: { text: scans.length ? data.scans[scans[0]].axis : "" }, gridcolor: rule,
      zeroline: false, linecolor: soft, ticks: "outside", anchor: "free", position: 0, minallowed: first, maxallowed: last };
    var shared = scans.length && scans.every(function (k) { return data.scans[k].wavelength === data.scans[scans[0]].wavelength; });
    if (shared && data.scans[scans[0]].wavelength) {
      var lastAt = -99, span = layout.xaxis.range[1] - layout.xaxis.range[0];
      [30, 20, 15, 12, 10, 8, 7, 6, 5, 4.5, 4, 3.5, 3.2, 3, 2.8, 2.6, 2.4, 2.2, 2, 1.8, 1.6, 1.5].forEach(function (d) {
        var s = data.scans[scans[0]].wavelength / (2 * d), at = s < 1 ? 2 * Math.asin(s) * 180 / Math.PI : -1;
        if (at < layout.xaxis.range[0] || at > layout.xaxis.range[1] || at - lastAt < span * (narrow ? 0.09 : 0.035)) { return; }
        lastAt = at;
        layout.annotations.push({ x: at, xref: "x", y: 1, yref: "paper", yanchor: "bottom", text: d + (d === 10 ? " Å" : ""), showarrow: false, font: { size: printing ? 8 : 11, color: soft } });
      });
    }
    scans.forEach(function (k, place) {
      var scan = data.scans[k], slot = overlaid ? 0 : place;
      var ya = slot === 0 ? "y" : "y" + (2 * slot + 1), yr = "y" + (2 * slot + 2);
      var line = overlaid ? inks[dark ? "dark" : "light"][k % 6] : ink;
      var top = 0, bottom = Infinity, bg = scan.background.length ? scan.background : scan.x.map(function () { return 0; });
      var edge = scan.x[0] + 0.06 * (scan.x[scan.x.length - 1] - scan.x[0]);
      scan.observed.forEach(function (v, i) { if (scan.x[i] >= edge) { top = Math.max(top, v); } bottom = Math.min(bottom, v); });
      if (curves.indexOf("background") >= 0 && scan.background.length) {
        traces.push({ type: "scatter", mode: "lines", x: scan.x, y: bg.map(f), xaxis: "x", yaxis: ya, hoverinfo: "skip", name: "background", meta: "background", line: { color: soft, width: 1, dash: "dash" } });
      }
      data.phases.forEach(function (phase) {
        var part = scan.parts[phase.id];
        if (!part || !part[1].length || phases.indexOf(phase.id) < 0) { return; }
        var x = scan.x.slice(part[0], part[0] + part[1].length);
        var y = part[1].map(function (v, i) { return v > 0 ? f(v + bg[part[0] + i]) : null; });
        traces.push({ type: "scatter", mode: "lines", x: x, y: y, xaxis: "x", yaxis: ya, name: safe(phase.name), meta: "phase:" + phase.id, hoverinfo: "skip",
          line: { color: dark ? phase.dark : phase.light, width: overlaid ? 1 : 1.6, dash: phase.dash }, connectgaps: false });
      });
      if (curves.indexOf("calculated") >= 0 && scan.calculated.length) {
        traces.push({ type: "scatter", mode: "lines", x: scan.x, y: scan.calculated.map(f), xaxis: "x", yaxis: ya, name: "calculated", meta: "calculated", hoverinfo: "skip",
          line: { color: overlaid ? line : (dark ? "#ff7ab8" : "#c2186e"), width: 2.2 }, opacity: overlaid ? 0.4 : 0.65 });
      }
      if (curves.indexOf("observed") >= 0) {
        traces.push({ type: "scatter", mode: "lines", x: scan.x, y: scan.observed.map(f), xaxis: "x", yaxis: ya, name: "observed", meta: "observed:" + k,
          text: scan.x.map(function (a, i) { return words(scan, a, scan.observed[i]); }), hovertemplate: "%{text}<extra></extra>",
          line: { color: line, width: 1, dash: overlaid ? rows[k % rows.length] : "solid" } });
      }
      var lo = f(bottom), hi = f(top), reach = Math.max(hi - lo, 0.1), floor = scale === "linear" ? -0.16 * hi : lo - 0.2 * reach;
      if (curves.indexOf("marks") >= 0 && !overlaid) {
        data.phases.forEach(function (phase, row) {
          var own = scan.marks.filter(function (m) { return m[0] === phase.id; });
          if (!own.length || phases.indexOf(phase.id) < 0) { return; }
          var foot = floor + (0.03 + 0.13 * (row % 6) / 6) * reach;
          traces.push({ type: "scatter", mode: "markers", x: own.map(function (m) { return m[2]; }), y: own.map(function () { return foot; }), xaxis: "x", yaxis: ya,
            name: safe(phase.name), meta: "marks:" + phase.id, marker: { symbol: "line-ns-open", size: printing ? 5 : 8, color: dark ? phase.dark : phase.light, line: { width: 2, color: dark ? phase.dark : phase.light } },
            text: own.map(function (m) { return "<b>" + safe(phase.name) + " " + safe(m[1]) + "</b><br>2θ " + m[2].toFixed(2) + "°   d " + m[3].toFixed(3) + " Å"; }), hovertemplate: "%{text}<extra></extra>" });
        });
      }
      if (residual && scan.calculated.length) {
        traces.push({ type: "scatter", mode: "lines", x: scan.x, y: scan.observed.map(function (v, i) { return Math.sqrt(Math.max(v, 0)) - Math.sqrt(Math.max(scan.calculated[i], 0)); }),
          xaxis: "x", yaxis: yr, name: "residual", meta: "residual", hoverinfo: "skip", line: { color: line, width: 0.7 } });
      }
      var key = ya.replace("y", "yaxis"), keyR = yr.replace("y", "yaxis");
      var gap = 0.03, each = (1 - gap * (n - 1)) / n, head = 1 - slot * (each + gap), foot = head - each, cut = residual ? foot + 0.2 * each : foot;
      if (layout[key]) { hi = Math.max(hi, layout[key].top); floor = Math.min(floor, layout[key].range[0]); reach = hi - floor; }
      var marks = ticks(scale, floor + 0.12 * reach, hi + 0.1 * reach);
      layout[key] = { domain: [cut, head], range: [floor, hi + 0.16 * reach], top: hi, tickvals: marks.at, ticktext: marks.text, gridcolor: rule, zeroline: false, fixedrange: true,
        linecolor: soft, title: { text: narrow ? "" : "intensity", standoff: 4 } };
      if (residual) {
        layout[keyR] = { domain: [foot, cut], range: [-3.2, 3.2], tickvals: [0], ticktext: ["0"], gridcolor: rule, zeroline: true, zerolinecolor: soft, fixedrange: true };
      }
      layout.annotations.push(overlaid
        ? { text: safe(scan.words), x: 1, y: head - 0.02 - place * 0.05, xref: "paper", yref: "paper", xanchor: "right", yanchor: "top", showarrow: false, font: { color: line } }
        : { text: "<b>" + safe(narrow ? scan.scan.replace(/_/g, " ") : scan.words) + "</b>", x: 1, y: head - 0.012, xref: "paper", yref: "paper", xanchor: "right", yanchor: "top", showarrow: false, font: { color: ink } });
    });
    Object.keys(layout).forEach(function (k) { if (layout[k] && layout[k].top !== undefined) { delete layout[k].top; } });
    return { traces: traces, layout: layout };
  }
  function draw() {
    var made = build();
    window.Plotly.react(plot, made.traces, made.layout, { displayModeBar: false, displaylogo: false, responsive: false, showTips: false, doubleClick: false, scrollZoom: false });
    if (drawn) { return; }
    drawn = true;
    plot.on("plotly_relayout", function (change) {
      if (change["xaxis.range[0]"] !== undefined) { range = [change["xaxis.range[0]"], change["xaxis.range[1]"]]; draw(); }
    });
    plot.on("plotly_doubleclick", function () { range = null; draw(); });
  }
  function whole() {
    var low = Infinity, high = -Infinity;
    data.scans.forEach(function (s) { low = Math.min(low, s.x[0]); high = Math.max(high, s.x[s.x.length - 1]); });
    return [low, high];
  }
  function move(how) {
    var all = whole(), now = range || all, middle = (now[0] + now[1]) / 2, half = (now[1] - now[0]) / 2;
    if (how === "all") { range = null; draw(); return; }
    if (how === "in") { half *= 0.6; }
    if (how === "out") { half /= 0.6; }
    if (how === "left") { middle -= half * 0.4; }
    if (how === "right") { middle += half * 0.4; }
    half = Math.min(half, (all[1] - all[0]) / 2);
    middle = Math.min(Math.max(middle, all[0] + half), all[1] - half);
    range = [middle - half, middle + half];
    draw();
  }
  function start() {
    bench.hidden = false;
    bench.addEventListener("change", draw);
    bench.querySelectorAll("[data-move]").forEach(function (b) { b.addEventListener("click", function () { move(b.getAttribute("data-move")); }); });
    plot.addEventListener("keydown", function (event) {
      var how = { ArrowLeft: "left", ArrowRight: "right", "+": "in", "=": "in", "-": "out", "0": "all" }[event.key];
      if (how) { event.preventDefault(); move(how); }
    });
    document.addEventListener("themechange", draw);
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", draw);
    var wait = null;
    window.addEventListener("resize", function () { clearTimeout(wait); wait = setTimeout(function () { if (!printing) { draw(); } }, 120); });
    window.addEventListener("beforeprint", function () { printing = true; draw(); });
    window.addEventListener("afterprint", function () { printing = false; draw(); });
    draw();
    plot.setAttribute("data-ready", "yes");
  }
  var beside = plot.getAttribute("data-beside");
  if (!beside) { start(); return; }
  var script = document.createElement("script");
  script.src = beside;
  script.onload = start;
  script.onerror = function () { plot.textContent = "The file " + beside + " beside this page is missing; without it the chart cannot be drawn."; };
  document.head.appendChild(script);
})();
