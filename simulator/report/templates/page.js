// Draws the page's charts from its data, and makes its map, tables, choices and printing work.
"use strict";
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const root = document.documentElement;
  const steps = data.steps;
  const labels = steps.day.map((day, i) => (steps.days[day] + " " + steps.time[i]).trim());
  const plots = [...document.querySelectorAll(".plot")];
  const touch = window.matchMedia("(pointer: coarse)").matches;
  const config = {
    displaylogo: false,
    responsive: true,
    scrollZoom: false,
    showTips: false,
    plotlyServerURL: "",
    modeBarButtons: [["zoom2d", "pan2d", "resetScale2d", "toImage"]],
  };

  // Colours: any string var(--name) in a figure stands for a colour of the theme.

  const colour = (name) => getComputedStyle(root).getPropertyValue(name).trim();

  function themed(value) {
    if (typeof value === "string") {
      return value.replace(/var\((--[\w-]+)\)/g, (whole, name) => colour(name));
    }
    if (Array.isArray(value))
      return value.every((each) => typeof each === "number") ? value : value.map(themed);
    if (value === null || typeof value !== "object") return value;
    return Object.fromEntries(Object.entries(value).map(([key, each]) => [key, themed(each)]));
  }

  function merged(base, over) {
    const result = { ...base };
    for (const [key, value] of Object.entries(over)) {
      const both = value && typeof value === "object" && !Array.isArray(value) && result[key];
      result[key] = both ? merged(result[key], value) : value;
    }
    return result;
  }

  function baseLayout() {
    const axis = {
      gridcolor: "var(--grid)",
      linecolor: "var(--rule)",
      zerolinecolor: "var(--muted)",
      zerolinewidth: 1,
      ticks: "",
      automargin: true,
      title: { standoff: 8, font: { size: 12, color: "var(--muted)" } },
    };
    return {
      paper_bgcolor: "rgba(0,0,0,0)",
      plot_bgcolor: "rgba(0,0,0,0)",
      font: {
        family: 'system-ui, -apple-system, "Segoe UI", Roboto, "Noto Sans", "Liberation Sans", sans-serif',
        size: 12,
        color: "var(--ink)",
      },
      margin: { l: 48, r: 36, t: 10, b: 34 },
      uirevision: "kept",
      dragmode: touch ? false : "zoom",
      hoverdistance: 30,
      hoverlabel: {
        bgcolor: "var(--surface)",
        bordercolor: "var(--rule)",
        font: { color: "var(--ink)", size: 12 },
        align: "left",
      },
      legend: {
        orientation: "h",
        x: 0,
        xanchor: "left",
        y: 1.02,
        yanchor: "bottom",
        traceorder: "normal",
        font: { size: 12 },
      },
      modebar: {
        bgcolor: "rgba(0,0,0,0)",
        color: "var(--muted)",
        activecolor: "var(--accent)",
        orientation: "v",
      },
      xaxis: axis,
      yaxis: axis,
      yaxis2: axis,
    };
  }

  // Time axes: steps are categories, so that an hour that a clock change repeats stays two columns.
  // A tick stands at the start of its step, half a column to the left of the column's middle,
  // and a hair beside it: a label shown where a tick stands would take the tick's short text.

  function ticks(first, last, most) {
    const shown = [];
    for (let i = Math.max(0, Math.ceil(first)); i <= Math.min(last, labels.length - 1); i++) shown.push(i);
    const days = shown.filter((i) => i === 0 || steps.day[i - 1] !== steps.day[i]);
    const place = (i) => i - 0.5 + (last - first) / 5000;
    if (days.length > 2 || steps.unit === "day") return placed(every(days, most), place, dayText);
    let named = -1;
    return placed(onTheClock(shown, most), place, (i) => {
      const day = steps.day[i] === named ? "" : "<br>" + dayText(i);
      named = steps.day[i];
      return steps.time[i].slice(0, 5) + day;
    });
  }

  const dayText = (i) => steps.days[steps.day[i]];
  const placed = (chosen, place, text) => ({ tickvals: chosen.map(place), ticktext: chosen.map(text) });

  function every(places, most) {
    const stride =
      [1, 2, 3, 4, 7, 14].find((n) => places.length / n <= most) || Math.ceil(places.length / most);
    return places.filter((place, i) => i % stride === 0);
  }

  // Whole hours of the clock, as many as fit; a repeated hour is marked once.
  function onTheClock(places, most) {
    const minute = (i) => Number(steps.time[i].slice(0, 2)) * 60 + Number(steps.time[i].slice(3, 5));
    const again = (i) => i > 0 && minute(i) <= minute(i - 1) && steps.day[i] === steps.day[i - 1];
    const on = (stride) => places.filter((i) => minute(i) % stride === 0 && !again(i));
    return [5, 15, 30, 60, 120, 180, 360, 720].map(on).find((chosen) => chosen.length <= most) || on(1440);
  }

  function timeAxis(plot, range) {
    const [first, last] = range || [-0.5, labels.length - 0.5];
    const longest = Math.max(...steps.days.map((day) => day.length));
    const most = Math.max(2, Math.floor((widthOf(plot) - 70) / (7 * longest + 16)));
    return { tickmode: "array", tickangle: 0, ...ticks(first, last, most) };
  }

  function retick(plot, change) {
    const touched = Object.keys(change).some((key) => /^xaxis\.(range|autorange)|^autosize/.test(key));
    if (!touched) return;
    const axis = timeAxis(plot, plot.layout.xaxis.range);
    Plotly.relayout(plot, { "xaxis.tickvals": axis.tickvals, "xaxis.ticktext": axis.ticktext });
  }

  function onSteps(trace) {
    const { at, ...rest } = trace;
    return { ...rest, x: at ? at.map((i) => labels[i]) : labels };
  }

  // A stacked area needs two points; a run of one step is drawn as columns.
  function columns(trace) {
    if (labels.length > 1 || trace.type !== "scatter" || trace.at) return trace;
    if (!trace.stackgroup) return { ...trace, mode: "markers" };
    return {
      type: "bar",
      name: trace.name,
      x: trace.x,
      y: trace.y,
      marker: { color: trace.fillcolor },
      hovertemplate: trace.hovertemplate,
    };
  }

  // Charts by name: most are figures as they come; prices and the map are put together here.

  const choices = {};
  const makers = { prices: pricePicture, map: networkMap, fleet: fleetPicture };

  // Long names of rows are cut where they would leave no room for the picture.
  function shortened(name, plot) {
    const most = narrow(plot) ? 14 : 30;
    const text = plain(name);
    return text.length > most ? escaped(text.slice(0, most - 1) + "…") : name;
  }

  const entities = { "&": "&amp;", "<": "&lt;", ">": "&gt;" };
  const escaped = (text) => text.replace(/[&<>]/g, (character) => entities[character]);
  const plain = (text) => text.replace(/&lt;/g, "<").replace(/&gt;/g, ">").replace(/&amp;/g, "&");

  function rowsAxis(figure, traces, plot) {
    const axis = figure.layout && figure.layout.yaxis;
    if (!axis || axis.type !== "category") return {};
    const names = traces[0].y;
    return { yaxis: { labelalias: Object.fromEntries(names.map((name) => [name, shortened(name, plot)])) } };
  }

  const PAPER_WIDTH = 670,
    PAPER_HEIGHT = 740;
  let onPaper = false;
  const widthOf = (plot) => (onPaper ? PAPER_WIDTH : plot.clientWidth);
  const narrow = (plot) => widthOf(plot) < 600;

  // The legend of a narrow chart has two columns, and the chart grows by its rows.
  function roomForLegend(figure, traces, plot) {
    const entries = traces.filter((trace) => trace.name).length;
    if (!narrow(plot) || entries < 4) return { height: figure.height };
    return {
      height: figure.height + 19 * Math.ceil(entries / 2),
      legend: { entrywidth: 0.48, entrywidthmode: "fraction" },
    };
  }

  function figureOf(plot) {
    const name = plot.dataset.chart;
    const figure = (makers[name] || ((given) => given))(data.figures[name]);
    const chosen = figure.choices ? figure.choices[choices[name] || 0] : figure;
    let traces = chosen.traces;
    if (figure.steps) traces = traces.map(onSteps).map(columns);
    const range = {
      type: "category",
      range: [-0.5, labels.length - 0.5],
      showgrid: true,
      ...timeAxis(plot, plot.layout?.xaxis?.range),
    };
    const layout = merged(baseLayout(), figure.steps ? { xaxis: range, barmode: "relative", bargap: 0 } : {});
    return {
      traces,
      steps: figure.steps,
      layout: merged(merged(merged(layout, figure.layout), chosen.layout || {}), {
        ...roomForLegend(figure, traces, plot),
        ...rowsAxis(figure, traces, plot),
      }),
    };
  }

  function draw(plot) {
    const figure = figureOf(plot);
    const drawn = Plotly.react(plot, themed(figure.traces), themed(figure.layout), config);
    if (!plot.dataset.drawn && figure.steps) plot.on("plotly_relayout", (change) => retick(plot, change));
    plot.dataset.drawn = "yes";
    return drawn;
  }

  const drawAll = () => plots.forEach(draw);

  // On and off: why a unit is on comes as a letter a step, whose meaning is looked up here.

  function fleetPicture(given) {
    if (!given.reasons) return given;
    const [picture, ...rest] = given.traces;
    const starts = rest.pop();
    const begins = new Set(starts.at.map((step, place) => `${starts.y[place]}\n${step}`));
    const letter = (unit, i) => given.reasons[unit][i];
    const lifted = (share, held) => (share > 0 && held ? share + 2 : share);
    const share = (on) => (on > 0 && on < 1 ? `${Math.round(100 * on)} &#37; on, ` : "");
    const start = (unit, i) => (begins.has(`${picture.y[unit]}\n${i}`) ? "start, " : "");
    const text = (on, unit, i) => start(unit, i) + share(on) + given.phrases[letter(unit, i).charCodeAt(0) - 97];
    const shown = {
      ...picture,
      z: picture.z.map((row, unit) => row.map((on, i) => lifted(on, given.held.includes(letter(unit, i))))),
      text: picture.z.map((row, unit) => row.map((on, i) => text(on, unit, i))),
      hovertemplate: "%{y}<br>%{x}<br>%{text}<br>%{customdata:,.1f} MW<extra></extra>",
    };
    const marked = { ...starts, hoverinfo: "skip", hovertemplate: null };
    return { ...given, traces: [shown, ...rest, marked] };
  }

  // Prices

  const partAt = (part, bus) => (part.every ? part.every : part.rows[bus]);

  function pricePicture(given) {
    const parts = ["energy", "congestion", "loss"].filter((part) => part in given.parts);
    const custom = given.order.map((bus) =>
      labels.map((label, i) => parts.map((part) => partAt(given.parts[part], bus)[i])),
    );
    const detail = parts.map((part, i) => `<br>${part} %{customdata[${i}]:,.2f}`).join("");
    const picture = {
      type: "heatmap",
      x: labels,
      y: given.order.map((bus) => given.buses[bus]),
      z: given.order.map((bus) => given.price[bus]),
      customdata: parts.length ? custom : undefined,
      zmin: given.scale.low,
      zmax: given.scale.high,
      colorscale: given.scale.stops,
      showscale: false,
      hovertemplate: `%{y}<br>%{x}<br>price %{z:,.2f} ${given.unit.replaceAll("%", "&#37;")}${detail}<extra></extra>`,
    };
    return {
      steps: true,
      height: Math.min(1200, Math.max(260, 130 + 11 * given.buses.length)),
      traces: [picture],
      layout: {
        yaxis: { type: "category", autorange: "reversed", showgrid: false },
        margin: { t: 6 },
        hovermode: "closest",
      },
    };
  }

  // The map

  const slider = document.getElementById("map-step");
  const mapPlot = document.getElementById("plot-map");
  const map = data.figures.map;
  const prices = data.figures.prices;

  const small = () => prices.buses.length > 200 || (narrow(mapPlot) && prices.buses.length > 24);

  function classOf(loading) {
    if (loading === null) return 0;
    return map.classes.findIndex((each) => loading < each.below);
  }

  function path(ends) {
    const x = [],
      y = [];
    for (const [from, to] of ends) {
      x.push(map.x[from], map.x[to], null);
      y.push(map.y[from], map.y[to], null);
    }
    return { x, y };
  }

  function lineTraces(step) {
    return map.classes.map((each, number) => {
      const ends = map.line_ends.filter((pair, line) => classOf(map.loading[line][step]) === number);
      return {
        type: "scatter",
        mode: "lines",
        name: each.name,
        hoverinfo: "skip",
        ...(ends.length ? path(ends) : { x: [null], y: [null] }),
        line: { color: each.colour, width: each.width, dash: each.dash || "solid" },
      };
    });
  }

  function tieTrace() {
    return {
      type: "scatter",
      mode: "lines",
      name: "tie",
      hoverinfo: "skip",
      ...path(map.tie_ends),
      line: { color: "var(--tie)", width: 2.2, dash: "dash" },
    };
  }

  // An arrow stands in the middle of its line, turned the way the power flows.
  function arrows(ends, names, flow, step, text, colours) {
    const middle = (axis) => ends.map(([from, to]) => (map[axis][from] + map[axis][to]) / 2);
    const turn = ([from, to], i) => {
      const sign = flow[i][step] < 0 ? -1 : 1;
      return (Math.atan2(sign * (map.x[to] - map.x[from]), sign * (map.y[to] - map.y[from])) * 180) / Math.PI;
    };
    return {
      type: "scatter",
      mode: "markers",
      x: middle("x"),
      y: middle("y"),
      text: names.map(text),
      hovertemplate: "%{text}<extra></extra>",
      marker: {
        symbol: names.map((name, i) => (Math.abs(flow[i][step]) < 0.05 ? "circle" : "triangle-up")),
        size: names.map((name, i) => (Math.abs(flow[i][step]) < 0.05 ? 5 : small() ? 8 : 12)),
        angle: ends.map(turn),
        color: colours,
        line: { width: 0.8, color: "var(--paper)" },
      },
    };
  }

  function written(value, digits) {
    if (value === null) return "no number";
    const places = { minimumFractionDigits: digits, maximumFractionDigits: digits };
    return value.toLocaleString("en", places).replace("-", "−");
  }

  const format = (value) => written(value, 1);
  const priceText = (value) => written(value, 2);

  function flowText(name, ends, flow) {
    const [from, to] = flow < 0 ? [ends[1], ends[0]] : ends;
    return `${name}<br>${prices.buses[from]} → ${prices.buses[to]}<br>${format(flow === null ? null : Math.abs(flow))} MW`;
  }

  function lineArrows(step) {
    const text = (name, line) => {
      const loading = map.loading[line][step];
      return (
        flowText(name, map.line_ends[line], map.flow[line][step]) +
        (loading === null ? "" : `, ${format(loading)} % of rating`)
      );
    };
    const colours = map.lines.map((name, line) => map.classes[classOf(map.loading[line][step])].colour);
    return arrows(map.line_ends, map.lines, map.flow, step, text, colours);
  }

  function tieArrows(step) {
    const text = (name, tie) => flowText(name, map.tie_ends[tie], map.tie_flow[tie][step]);
    return arrows(map.tie_ends, map.ties, map.tie_flow, step, text, "var(--tie)");
  }

  const pricesAt = (step) => prices.price.map((row) => row[step]);

  // The lowest and the highest of the prices there are.
  function endsOf(now) {
    const there = now.filter((price) => price !== null);
    return there.length ? [Math.min(...there), Math.max(...there)] : [null, null];
  }

  // Few buses carry their names; of many, only the cheapest and the dearest at the time.
  function named(step) {
    if (prices.buses.length <= 24) return () => true;
    const now = pricesAt(step);
    const ends = endsOf(now).map((price) => now.indexOf(price));
    return (bus) => ends.includes(bus);
  }

  function busTrace(step) {
    const now = pricesAt(step);
    const show = named(step);
    const zone = (bus) => (prices.zones[bus] ? `, ${prices.zones[bus]}` : "");
    return {
      type: "scatter",
      mode: "markers+text",
      x: map.x,
      y: map.y,
      cliponaxis: false,
      text: prices.buses.map((name, bus) => (show(bus) ? shortened(name, mapPlot) : "")),
      textposition: "top center",
      textfont: {
        size: 12,
        color: "var(--ink)",
        shadow: "0 0 3px var(--paper), 0 0 3px var(--paper), 0 0 5px var(--paper)",
      },
      customdata: prices.buses.map(
        (name, bus) => `${name}${zone(bus)}<br>${priceText(now[bus])} ${prices.unit}`,
      ),
      hovertemplate: "%{customdata}<extra></extra>",
      marker: {
        size: small() ? 8 : 13,
        color: now,
        cmin: prices.scale.low,
        cmax: prices.scale.high,
        colorscale: prices.scale.stops,
        showscale: false,
        line: { width: 1.2, color: "var(--ink)" },
      },
    };
  }

  const extent = (values) => Math.max(...values) - Math.min(...values);

  function mapHeight() {
    const shape = extent(map.y) / (extent(map.x) || 1e-9);
    return Math.min(720, Math.max(300, (widthOf(mapPlot) - 80) * shape + 40));
  }

  function networkMap() {
    const step = Number(slider.value);
    const bare = { visible: false, showgrid: false, zeroline: false };
    return {
      height: mapHeight(),
      traces: [...lineTraces(step), tieTrace(), lineArrows(step), tieArrows(step), busTrace(step)],
      layout: {
        xaxis: bare,
        yaxis: { ...bare, scaleanchor: "x", scaleratio: 1 },
        hovermode: "closest",
        margin: { l: 40, r: 40, t: 24, b: 12 },
        showlegend: false,
      },
    };
  }

  // What the map shows now, in words: also for readers who do not see it.
  function mapWords(step) {
    const now = pricesAt(step);
    const [low, high] = endsOf(now);
    const at = (value) => plain(prices.buses[now.indexOf(value)]);
    const unit = plain(prices.unit);
    const limit = map.classes.length - 1;
    const full = map.lines.filter((name, line) => classOf(map.loading[line][step]) === limit).map(plain);
    const some = full.slice(0, 5).join(", ") + (full.length > 5 ? ` and ${full.length - 5} more` : "");
    const range =
      low === high
        ? `one price, ${priceText(low)} ${unit}`
        : `from ${priceText(low)} ${unit} at ${at(low)} to ${priceText(high)} at ${at(high)}`;
    const lines = full.length ? `At their limit: ${some}.` : "No line at its limit.";
    return `${labels[step]}: ${range}. ${lines}`;
  }

  let waiting = false;
  function showStep() {
    const step = Number(slider.value);
    document.getElementById("map-label").textContent = labels[step];
    slider.setAttribute("aria-valuetext", labels[step]);
    document.getElementById("map-now").textContent = mapWords(step);
    if (waiting) return;
    waiting = true;
    requestAnimationFrame(() => {
      waiting = false;
      draw(mapPlot);
    });
  }

  function playing() {
    const button = document.getElementById("map-play");
    let timer = null;
    const stop = () => {
      clearInterval(timer);
      timer = null;
      button.textContent = "Play";
      button.setAttribute("aria-pressed", "false");
      document.getElementById("map-now").setAttribute("aria-live", "polite");
    };
    const forward = () => {
      if (Number(slider.value) >= Number(slider.max)) return stop();
      slider.value = Number(slider.value) + 1;
      showStep();
    };
    button.addEventListener("click", () => {
      if (timer) return stop();
      if (slider.value === slider.max) slider.value = 0;
      button.textContent = "Pause";
      button.setAttribute("aria-pressed", "true");
      document.getElementById("map-now").setAttribute("aria-live", "off");
      timer = setInterval(forward, 400);
    });
  }

  // Tables

  function sorted(rows, column, up) {
    const key = (row) => row.cells[column].dataset.sort;
    const numeric = rows.every((row) => key(row) === "" || !Number.isNaN(Number(key(row))));
    const compare = numeric
      ? (a, b) => Number(key(a)) - Number(key(b))
      : (a, b) => key(a).localeCompare(key(b), "en", { numeric: true });
    return rows.sort((a, b) => (up ? compare(a, b) : compare(b, a)));
  }

  function sortable(table) {
    const heads = [...table.tHead.rows[0].cells];
    heads.forEach((head, column) => {
      const button = document.createElement("button");
      button.type = "button";
      button.textContent = head.textContent;
      head.replaceChildren(button);
      button.addEventListener("click", () => {
        const now = head.getAttribute("aria-sort");
        const ascending = now ? now === "descending" : !head.classList.contains("number");
        heads.forEach((each) => each.removeAttribute("aria-sort"));
        head.setAttribute("aria-sort", ascending ? "ascending" : "descending");
        table.tBodies[0].append(...sorted([...table.tBodies[0].rows], column, ascending));
      });
    });
  }

  // Theme and printing: paper is always light and as wide as an A4 page.

  const themeButton = document.getElementById("theme");

  function nameTheme() {
    themeButton.textContent = root.dataset.theme === "dark" ? "Light" : "Dark";
    themeButton.setAttribute("aria-label", `Switch to the ${themeButton.textContent.toLowerCase()} theme`);
  }

  function rethemed() {
    nameTheme();
    drawAll();
  }

  function toPaper() {
    onPaper = true;
    root.dataset.screen = root.dataset.theme;
    root.dataset.theme = "light";
    for (const plot of plots) {
      const figure = figureOf(plot);
      const size = { width: PAPER_WIDTH, height: Math.min(PAPER_HEIGHT, figure.layout.height) };
      Plotly.react(plot, themed(figure.traces), themed({ ...figure.layout, ...size }), config);
    }
  }

  function toScreen() {
    onPaper = false;
    root.dataset.theme = root.dataset.screen;
    drawAll();
    plots.forEach((plot) => Plotly.Plots.resize(plot));
  }

  themeButton.hidden = false;
  themeButton.addEventListener("click", () => {
    root.dataset.theme = root.dataset.theme === "dark" ? "light" : "dark";
    root.dataset.chosen = "yes";
    rethemed();
  });
  window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", rethemed);
  window.addEventListener("beforeprint", toPaper);
  window.addEventListener("afterprint", toScreen);
  document.querySelectorAll("table[data-sortable]").forEach(sortable);
  document.querySelectorAll("select[data-chart]").forEach((select) => {
    select.addEventListener("change", () => {
      choices[select.dataset.chart] = Number(select.value);
      draw(document.getElementById(`plot-${select.dataset.chart}`));
    });
  });
  if (slider) {
    slider.addEventListener("input", showStep);
    playing();
    showStep();
  }
  rethemed();
})();
