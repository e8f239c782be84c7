"use strict";
// Draws every figure of the page with the chart library, from the numbers that stand in the page.
const pageData = JSON.parse(document.getElementById("page-data").textContent);
const charts = new Map();

function themeColour(name) {
  return getComputedStyle(document.documentElement).getPropertyValue(name).trim();
}
const seriesColour = (index) => themeColour("--c" + (index % 6));

/** "1e-12" for a power of ten, at most six significant digits otherwise. */
function tickText(value, logarithmic) {
  if (!logarithmic) return String(Number(value.toPrecision(6)));
  const exponent = Math.log10(value);
  return Math.abs(exponent - Math.round(exponent)) < 1e-6 ? "1e" + Math.round(exponent) : "";
}

/** A field of probability density, painted under the curves. */
const fieldPainter = {
  id: "field",
  beforeDatasetsDraw(chart) {
    const field = chart.config.options.field;
    if (!field) return;
    if (!chart.fieldImage) {
      const rows = field.rows.length, columns = field.rows[0].length;
      const image = document.createElement("canvas");
      image.width = columns;
      image.height = rows;
      const paint = image.getContext("2d");
      const pixels = paint.createImageData(columns, rows);
      const hex = seriesColour(0).slice(1);
      const rgb = [0, 2, 4].map((at) => parseInt(hex.slice(at, at + 2), 16));
      for (let r = 0; r < rows; ++r) {
        for (let c = 0; c < columns; ++c) {
          const share = (field.rows[rows - 1 - r][c] - field.floor) / (field.top - field.floor);
          const at = 4 * (r * columns + c);
          pixels.data.set([...rgb, Math.round(255 * Math.min(1, Math.max(0, share)))], at);
        }
      }
      paint.putImageData(pixels, 0, 0);
      chart.fieldImage = image;
    }
    const { x, y } = chart.scales, area = chart.chartArea, paint = chart.ctx;
    const halfX = (field.x_max - field.x_min) / (field.rows[0].length - 1) / 2;
    const halfY = (field.y_max - field.y_min) / (field.rows.length - 1) / 2;
    const left = x.getPixelForValue(field.x_min - halfX), right = x.getPixelForValue(field.x_max + halfX);
    const top = y.getPixelForValue(field.y_max + halfY), bottom = y.getPixelForValue(field.y_min - halfY);
    paint.save();
    paint.beginPath();
    paint.rect(area.left, area.top, area.width, area.height);
    paint.clip();
    paint.imageSmoothingEnabled = true;
    paint.drawImage(chart.fieldImage, left, top, right - left, bottom - top);
    paint.restore();
  },
};

/** Boxes that must stay clear. */
const boxPainter = {
  id: "boxes",
  afterDatasetsDraw(chart) {
    const { x, y } = chart.scales, paint = chart.ctx;
    for (const box of chart.config.options.boxes || []) {
      const left = x.getPixelForValue(box.x_min), right = x.getPixelForValue(box.x_max);
      const top = y.getPixelForValue(box.y_max), bottom = y.getPixelForValue(box.y_min);
      paint.save();
      paint.strokeStyle = themeColour("--ink");
      paint.lineWidth = 2;
      paint.strokeRect(left, top, right - left, bottom - top);
      paint.restore();
    }
  },
};

/** Straight lines across a bar chart, such as a target. */
const guidePainter = {
  id: "guides",
  afterDatasetsDraw(chart) {
    const paint = chart.ctx, area = chart.chartArea;
    for (const guide of chart.config.options.guides || []) {
      const at = chart.scales.x.getPixelForValue(guide.at);
      paint.save();
      paint.strokeStyle = themeColour("--ink");
      paint.fillStyle = themeColour("--ink");
      paint.setLineDash([6, 4]);
      paint.beginPath();
      paint.moveTo(at, area.top);
      paint.lineTo(at, area.bottom);
      paint.stroke();
      paint.textAlign = at > (area.left + area.right) / 2 ? "right" : "left";
      paint.fillText(" " + guide.name + " ", at, area.top + 10);
      paint.restore();
    }
  },
};

/** Lines from zero up or down to each cursor. */
const stemPainter = {
  id: "stems",
  beforeDatasetsDraw(chart) {
    const { x, y } = chart.scales, paint = chart.ctx;
    for (const set of chart.data.datasets) {
      if (!set.stems) continue;
      paint.save();
      paint.strokeStyle = set.borderColor;
      paint.lineWidth = 1.5;
      paint.beginPath();
      for (const point of set.data) {
        if (!Number.isFinite(point.y) || point.x < x.min || point.x > x.max) continue;
        paint.moveTo(x.getPixelForValue(point.x), y.getPixelForValue(0));
        paint.lineTo(x.getPixelForValue(point.x), y.getPixelForValue(point.y));
      }
      paint.stroke();
      paint.restore();
    }
  },
};

function axisOptions(axis) {
  const ink = themeColour("--ink"), rule = themeColour("--rule");
  const options = {
    type: axis.logarithmic ? "logarithmic" : "linear",
    title: { display: true, text: axis.label, color: ink },
    ticks: { color: ink, maxRotation: 0, includeBounds: false, callback: (value) => tickText(value, axis.logarithmic) },
    grid: { color: rule, borderColor: ink },
  };
  if (axis.min !== null) options.min = axis.min;
  if (axis.max !== null) options.max = axis.max;
  return options;
}

function curveChart(figure) {
  const datasets = figure.series.map((series) => ({
    label: series.name,
    data: series.x.map((x, i) => ({ x, y: series.y[i] === null ? NaN : series.y[i] })),
    borderColor: seriesColour(series.colour),
    backgroundColor: seriesColour(series.colour),
    borderDash: series.dashed ? [6, 4] : [],
    borderWidth: 1.8,
    showLine: series.kind === "line",
    pointRadius: series.kind === "line" ? 0 : 3,
    pointHitRadius: 6,
    stems: series.kind === "stems",
  }));
  // A guide runs across all that is drawn.
  const xs = figure.series.flatMap((s) => s.x), ys = figure.series.flatMap((s) => s.y);
  if (figure.field) {
    xs.push(figure.field.x_min, figure.field.x_max);
    ys.push(figure.field.y_min, figure.field.y_max);
  }
  const span = (list, axis) => {
    const known = list.filter((v) => v !== null && Number.isFinite(v));
    return [axis.min !== null ? axis.min : Math.min(...known), axis.max !== null ? axis.max : Math.max(...known)];
  };
  for (const guide of figure.guides) {
    const [low, high] = guide.vertical ? span(ys, figure.y) : span(xs, figure.x);
    datasets.push({
      label: guide.name,
      data: guide.vertical ? [{ x: guide.at, y: low }, { x: guide.at, y: high }]
                           : [{ x: low, y: guide.at }, { x: high, y: guide.at }],
      borderColor: themeColour("--soft"), backgroundColor: themeColour("--soft"),
      borderDash: [3, 3], borderWidth: 1.5, showLine: true, pointRadius: 0,
    });
  }
  for (const box of figure.boxes) {
    datasets.push({ label: box.name, data: [], borderColor: themeColour("--ink"), backgroundColor: "transparent", borderWidth: 2 });
  }
  const [xMin, xMax] = span(xs, figure.x);
  const x = axisOptions({ ...figure.x, min: xMin, max: xMax });
  return {
    type: "scatter",
    data: { datasets },
    options: { scales: { x, y: axisOptions(figure.y) }, field: figure.field, boxes: figure.boxes },
  };
}

function barChart(figure) {
  const { names, groups } = figure.bars;
  const datasets = groups.map((group) => ({
    label: group.name,
    data: group.to.map((to, i) => (to === null ? null : [group.from.length ? group.from[i] : 0, to])),
    backgroundColor: seriesColour(group.colour),
    borderSkipped: false,
    maxBarThickness: 26,
    grouped: !figure.bars.overlaid,
  }));
  const ink = themeColour("--ink");
  const shown = names.map((name) => (name.length > 40 ? name.slice(0, 38) + "\u2026" : name));
  return {
    type: "bar",
    data: { labels: shown, datasets },
    options: {
      indexAxis: "y",
      guides: figure.guides,
      scales: {
        x: axisOptions(figure.x),
        y: { ticks: { color: ink, autoSkip: false }, grid: { display: false, borderColor: ink } },
      },
    },
  };
}

function drawFigure(figure) {
  const canvas = document.querySelector("#" + figure.id + " canvas");
  if (!canvas) return;
  if (charts.has(figure.id)) charts.get(figure.id).destroy();
  const config = figure.bars ? barChart(figure) : curveChart(figure);
  const ink = themeColour("--ink");
  Object.assign(config.options, {
    animation: false,
    responsive: true,
    maintainAspectRatio: false,
    normalized: true,
    color: ink,
    plugins: {
      legend: { position: "bottom", labels: { color: ink, boxWidth: 26, boxHeight: 2, filter: (item) => item.text !== "" } },
      tooltip: {
        callbacks: {
          label(item) {
            const pair = Array.isArray(item.raw) ? item.raw[1] - item.raw[0] : null;
            if (pair !== null) return item.dataset.label + ": " + pair.toPrecision(4);
            return item.dataset.label + ": (" + item.parsed.x.toPrecision(4) + ", " + item.parsed.y.toPrecision(4) + ")";
          },
        },
      },
    },
  });
  config.plugins = [fieldPainter, boxPainter, guidePainter, stemPainter];
  charts.set(figure.id, new Chart(canvas, config));
}

function drawAll() {
  for (const figure of pageData.figures) drawFigure(figure);
}

/** Click on a column's head sorts the table by it; numbers as numbers. */
function makeSortable(table) {
  for (const head of table.querySelectorAll("th[data-sort]")) {
    const button = document.createElement("button");
    button.type = "button";
    button.textContent = head.textContent;
    head.replaceChildren(button);
    button.addEventListener("click", () => {
      const rising = head.getAttribute("aria-sort") !== "ascending";
      for (const other of table.querySelectorAll("th")) other.removeAttribute("aria-sort");
      head.setAttribute("aria-sort", rising ? "ascending" : "descending");
      const key = (row) => {
        const text = row.cells[head.cellIndex].textContent.trim();
        const number = Number(text);
        return text !== "" && Number.isFinite(number) ? number : text;
      };
      const body = table.tBodies[0];
      const rows = [...body.rows].sort((a, b) => {
        const ka = key(a), kb = key(b);
        const order = typeof ka === "number" && typeof kb === "number" ? ka - kb
                                                                      : String(ka).localeCompare(String(kb));
        return rising ? order : -order;
      });
      body.append(...rows);
    });
  }
}

document.querySelectorAll("table.sortable").forEach(makeSortable);
drawAll();
window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", drawAll);
// Paper is light whatever the screen is, and has its own width.
window.addEventListener("beforeprint", () => charts.forEach((chart) => chart.resize()));
window.addEventListener("afterprint", () => charts.forEach((chart) => chart.resize()));
