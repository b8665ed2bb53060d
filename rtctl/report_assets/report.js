// Draws the report's figures with a time axis from the numbers in the page. All of them share one time axis: a drag zooms all.
"use strict";
(function () {
  const data = JSON.parse(document.getElementById("figures").textContent);
  const INK = "#1b1f23", GRID = "#e3e7ea", STOP = "#444444", EMPTY = -32768;
  const FONT = '12px "DejaVu Sans", Verdana, Arial, sans-serif';
  const DASHES = [[], [9, 4], [3, 3], [10, 3, 2, 3], [14, 4], [2, 5]];
  const charts = [];
  let chosen = [0];
  let span = null;      // the zoomed span of time, null = everything
  let spreading = false;

  const times = new Array(2 * data.grid.columns);
  for (let k = 0; k < times.length; k++) times[k] = data.grid.start + data.grid.width * (0.25 + 0.5 * k);
  const whole = [data.grid.start, data.grid.start + data.grid.width * data.grid.columns];

  function bytes(text) {
    const raw = atob(text), out = new Uint8Array(raw.length);
    for (let k = 0; k < raw.length; k++) out[k] = raw.charCodeAt(k);
    return out;
  }

  function curve(packed, factor) {
    const steps = new Int16Array(bytes(packed.steps).buffer), out = new Array(steps.length);
    for (let k = 0; k < steps.length; k++) out[k] = steps[k] === EMPTY ? null : factor * (packed.middle + packed.scale * steps[k]);
    return out;
  }

  function digits(value) {
    if (value == null) return "-";
    if (value === 0) return "0";
    const size = Math.abs(value);
    return size >= 1e-3 && size < 1e5 ? value.toPrecision(4) : value.toExponential(2);
  }

  // ---- one figure ---------------------------------------------------------------------------------------------------------------

  function zoomAll(from, range) {
    if (spreading) return;
    spreading = true;
    span = range;
    const [low, high] = range || whole;
    for (const chart of charts) if (chart !== from) chart.setScale("x", { min: low, max: high });
    spreading = false;
  }

  function stopMarks(stops) {
    return function (u) {
      const ctx = u.ctx, ratio = devicePixelRatio;
      ctx.save();
      ctx.beginPath();
      ctx.rect(u.bbox.left, u.bbox.top, u.bbox.width, u.bbox.height);
      ctx.clip();
      ctx.strokeStyle = STOP;
      ctx.fillStyle = STOP;
      ctx.lineWidth = ratio;
      ctx.setLineDash([5 * ratio, 4 * ratio]);
      ctx.font = 10 * ratio + "px Verdana, Arial, sans-serif";
      ctx.textBaseline = "top";
      let row = 0;
      for (const [time, text] of stops) {
        const x = u.valToPos(time, "x", true);
        if (x < u.bbox.left || x > u.bbox.left + u.bbox.width) continue;
        ctx.beginPath();
        ctx.moveTo(x, u.bbox.top);
        ctx.lineTo(x, u.bbox.top + u.bbox.height);
        ctx.stroke();
        const right = x > u.bbox.left + 0.6 * u.bbox.width;
        ctx.textAlign = right ? "right" : "left";
        ctx.fillText(text, x + (right ? -4 : 4) * ratio, u.bbox.top + (4 + 13 * (row % 4)) * ratio);
        row++;
      }
      ctx.restore();
    };
  }

  function limitLines(limit, unit) {
    return function (u) {
      const ctx = u.ctx, ratio = devicePixelRatio, scale = u.scales.y;
      ctx.save();
      ctx.strokeStyle = INK;
      ctx.fillStyle = INK;
      ctx.lineWidth = ratio;
      ctx.setLineDash([2 * ratio, 3 * ratio]);
      ctx.font = 10 * ratio + "px Verdana, Arial, sans-serif";
      ctx.textAlign = "right";
      let seen = false;
      for (const value of [limit, -limit]) {
        if (value < scale.min || value > scale.max) continue;
        seen = true;
        const y = u.valToPos(value, "y", true);
        ctx.beginPath();
        ctx.moveTo(u.bbox.left, y);
        ctx.lineTo(u.bbox.left + u.bbox.width, y);
        ctx.stroke();
        ctx.textBaseline = value > 0 ? "top" : "bottom";
        ctx.fillText("limit", u.bbox.left + u.bbox.width - 4 * ratio, y + (value > 0 ? 2 : -2) * ratio);
      }
      if (!seen) {
        ctx.textBaseline = "top";
        ctx.fillText("limit \u00b1" + limit + " " + unit + " lies outside", u.bbox.left + u.bbox.width - 4 * ratio, u.bbox.top + 4 * ratio);
      }
      ctx.restore();
    };
  }

  function axis(title, size) {
    return {
      label: title, font: FONT, labelFont: FONT, stroke: INK, size: size, labelSize: 20, labelGap: 2,
      grid: { stroke: GRID, width: 1 }, ticks: { stroke: GRID, width: 1, size: 5 }, values: (u, ticks) => ticks.map((v) => +v.toPrecision(8)),
    };
  }

  function draw(place, option) {
    const width = Math.max(320, Math.floor(place.getBoundingClientRect().width));
    const chart = new uPlot({
      width: width, height: option.height, title: option.title,
      scales: { x: { time: false, min: (span || whole)[0], max: (span || whole)[1] }, y: { range: option.range } },
      axes: [{ ...axis("time since the motion began [s]", 28), ...(option.xAxis || {}) }, { ...axis(option.yTitle, option.ySize || 58), ...(option.yAxis || {}) }],
      series: [{ label: "t [s]", value: (u, v) => digits(v) }, ...option.series],
      cursor: { y: false, sync: { key: "time", scales: ["x", null], setSeries: false }, drag: { x: true, y: false, setScale: false }, points: { size: 5 } },
      legend: { show: option.legend !== false },
      hooks: {
        draw: option.over || [],
        drawClear: option.under || [],
        setSelect: [(u) => {
          if (u.select.width < 4) return;
          const low = u.posToVal(u.select.left, "x"), high = u.posToVal(u.select.left + u.select.width, "x");
          u.setSelect({ left: 0, width: 0, top: 0, height: 0 }, false);
          zoomAll(null, [low, high]);
        }],
      },
    }, option.data, place);
    chart.over.addEventListener("dblclick", () => zoomAll(null, null));
    charts.push(chart);
    return chart;
  }

  function slot(parent, heading) {
    const place = document.createElement("div");
    place.className = "chart";
    if (heading) {
      const title = document.createElement("h3");
      title.textContent = heading;
      parent.appendChild(title);
    }
    parent.appendChild(place);
    return place;
  }

  function slots(parent, headings) {  // side by side; all are made before one is drawn, so that their widths are final
    const pair = document.createElement("div");
    pair.className = "pair";
    parent.appendChild(pair);
    return headings.map((heading) => {
      const cell = document.createElement("div");
      pair.appendChild(cell);
      return slot(cell, heading);
    });
  }

  // ---- the figures --------------------------------------------------------------------------------------------------------------

  const line = (label, colour, width, dash) => ({ label: label, stroke: colour, width: width, dash: dash, value: (u, v) => digits(v) });
  const allStops = data.records.flatMap((r) => r.stops.map(([time, text]) => [time, text && data.records.length > 1 ? r.label + ": " + text : text]));
  const shown = (j) => data.records.map((r, k) => [r, k]).filter(([r]) => r.error[j]);

  function tracking(parent, j) {
    const joint = data.joints[j], small = joint.unit === "m" ? "mm" : "mrad";
    const references = shown(j).filter(([r]) => r.reference);
    const first = slot(parent, joint.name + ": reference and measured position");
    draw(first, {
      height: 250, yTitle: "position [" + joint.unit + "]",
      data: [times, ...references.map(([r]) => curve(r.reference[j], 1)), ...shown(j).map(([r]) => curve(r.position[j], 1))],
      series: [
        ...references.map(([r]) => line(references.length > 1 ? "reference of " + r.label : "reference", "#000000", 2.2, [2, 4])),
        ...shown(j).map(([r, k]) => line(r.label, r.colour, 1.3, DASHES[k % DASHES.length])),
      ],
      over: [stopMarks(allStops)],
    });
    const second = slot(parent, joint.name + ": tracking error, reference minus measured");
    draw(second, {
      height: 230, yTitle: "error [" + small + "]",
      data: [times, ...shown(j).map(([r]) => curve(r.error[j], 1000))],
      series: shown(j).map(([r, k]) => line(r.label, r.colour, 1.3, DASHES[k % DASHES.length])),
      over: [stopMarks(allStops)],
    });
  }

  function torque(parent, j) {
    const joint = data.joints[j];
    let top = 0;
    const sets = shown(j).map(([r, k]) => {
      const set = [curve(r.torque[j].out, 1), ...r.torque[j].terms.map((t) => curve(t, 1))];
      for (const values of set) for (const v of values) if (v !== null) top = Math.max(top, Math.abs(v));
      return [r, set];
    });
    if (joint.limit < 2 * top && joint.limit > top) top = joint.limit;
    const range = [-1.08 * top || -1, 1.08 * top || 1];
    const places = slots(parent, sets.map(([r]) => r.label + ", " + joint.name));
    for (const [r, set] of sets) {
      draw(places.shift(), {
        height: 240, yTitle: "torque [" + joint.torqueUnit + "]", range: () => range, data: [times, ...set],
        series: [
          line("sent", "#000000", 1.8, []),
          ...r.terms.map((name, k) => line(name, data.termColours[k % data.termColours.length], 1.2, DASHES[(k + 1) % DASHES.length])),
        ],
        over: [limitLines(joint.limit, joint.torqueUnit), stopMarks(r.stops)],
      });
    }
  }

  function effort(parent) {
    draw(slot(parent), {
      height: 250, yTitle: "effort [N\u00b2 m\u00b2 s]", ySize: 66,
      data: [times, ...data.records.map((r) => curve(r.effort, 1))],
      series: data.records.map((r, k) => line(r.label, r.colour, 1.6, DASHES[k % DASHES.length])),
      over: [stopMarks(allStops)],
    });
  }

  function shade(value) {  // from white over blue to black: the darker, the nearer to the limit
    if (value === 255) return "#dddddd";
    const far = value / 254, stops = [[0, 0, 0], [0, 70, 120], [86, 160, 215], [235, 243, 249], [255, 255, 255]];
    const place = far * (stops.length - 1), k = Math.min(stops.length - 2, Math.floor(place)), part = place - k;
    const mix = (i) => Math.round(stops[k][i] + part * (stops[k + 1][i] - stops[k][i]));
    return "rgb(" + mix(0) + "," + mix(1) + "," + mix(2) + ")";
  }

  function margins(parent) {
    const places = slots(parent, data.records.map((r) => r.label));
    for (const r of data.records) {
      const count = r.watches.length, values = bytes(r.margins), strip = data.strip;
      const paint = (u) => {
        const ctx = u.ctx, ratio = devicePixelRatio, high = u.bbox.height / count;
        ctx.save();
        ctx.beginPath();
        ctx.rect(u.bbox.left, u.bbox.top, u.bbox.width, u.bbox.height);
        ctx.clip();
        for (let k = 0; k < strip.columns; k++) {
          const from = u.valToPos(strip.start + k * strip.width, "x", true), to = u.valToPos(strip.start + (k + 1) * strip.width, "x", true);
          if (to < u.bbox.left || from > u.bbox.left + u.bbox.width) continue;
          for (let w = 0; w < count; w++) {
            ctx.fillStyle = shade(values[k * count + w]);
            ctx.fillRect(Math.floor(from), u.bbox.top + w * high, Math.ceil(to - from) + 1, high - ratio);
          }
        }
        ctx.restore();
      };
      draw(places.shift(), {
        height: 15 * count + 56, yTitle: "", ySize: 112, legend: false, range: () => [0, count], data: [times, times.map(() => null)],
        series: [{ label: "", show: true }], xAxis: { grid: { show: false } }, under: [paint], over: [stopMarks(r.stops)],
        yAxis: {
          splits: () => r.watches.map((name, w) => count - w - 0.5), values: () => r.watches.map((name) => name.replace(/_/g, " ")),
          grid: { show: false }, ticks: { show: false }, label: undefined, labelSize: 0, gap: 6, font: '11px "DejaVu Sans", Verdana, Arial, sans-serif',
        },
      });
    }
  }

  // ---- choice of joint, size, saving --------------------------------------------------------------------------------------------

  function fill() {
    for (const chart of charts) chart.destroy();
    charts.length = 0;
    const places = ["tracking", "torque", "effort", "margins"].map((name) => document.getElementById(name));
    for (const place of places) place.replaceChildren();
    for (const j of chosen) {
      tracking(places[0], j);
      torque(places[1], j);
    }
    effort(places[2]);
    margins(places[3]);
  }

  const names = data.joints.map((joint) => joint.name);
  const choices = [...names.map((name, j) => [name, [j]]), ...(names.length > 1 ? [["all joints", names.map((name, j) => j)]] : [])];
  const bar = document.getElementById("joints");
  for (const [text, joints] of choices) {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = text;
    button.setAttribute("aria-pressed", String(joints === choices[0][1]));
    button.addEventListener("click", () => {
      for (const other of bar.querySelectorAll("button")) other.setAttribute("aria-pressed", String(other === button));
      chosen = joints;
      fill();
    });
    bar.appendChild(button);
  }

  let waiting = 0;
  window.addEventListener("resize", () => { clearTimeout(waiting); waiting = setTimeout(fill, 150); });
  function fit() {
    for (const chart of charts) {
      const width = Math.floor(chart.root.parentElement.getBoundingClientRect().width);
      if (width > 0) chart.setSize({ width: width, height: chart.height });
    }
  }
  window.matchMedia("print").addEventListener("change", fit);
  window.addEventListener("beforeprint", fit);
  window.addEventListener("afterprint", fit);

  for (const button of document.querySelectorAll("button[data-save]")) {
    button.addEventListener("click", () => {
      const source = document.getElementById(button.dataset.save), link = document.createElement("a");
      const values = JSON.parse(source.textContent), text = typeof values === "string" ? values : JSON.stringify(values, null, 1);
      link.href = URL.createObjectURL(new Blob([text], { type: typeof values === "string" ? "text/csv" : "application/json" }));
      link.download = source.dataset.name;
      link.click();
      URL.revokeObjectURL(link.href);
    });
  }
  fill();
})();
