"use strict";
// "Try a setting": the worst-case eye of any setting, by the definitions that the program uses.
// Units: volts inside, millivolts on the page.
(function () {
  const trial = pageData.trial;
  if (!trial) return;
  const perUi = trial.samples_per_ui;
  const [before, after] = trial.span_ui;
  const taps = trial.taps;                          // {position, codes: [values]} or {min, max}
  const first = Math.min(0, ...taps.map((t) => t.position));
  const last = Math.max(0, ...taps.map((t) => t.position));
  const main = before - first;                      // row of the main cursor
  const numRows = before + after + 1 + last - first;

  /** Sample of a pulse, 0 outside its record. */
  const sample = (pulse, at) => (at >= 0 && at < pulse.length ? pulse[at] * trial.unit_v : 0);

  /** Cursors within the span at sample `at`, unequalised. */
  function spanRow(pulse, at) {
    const row = new Float64Array(before + after + 1);
    for (let k = 0; k < row.length; ++k) row[k] = sample(pulse, at + (k - before) * perUi);
    return row;
  }

  function filtered(row, fir, amplitude) {
    const out = new Float64Array(numRows);
    taps.forEach((tap, i) => {
      const shift = tap.position - first;
      for (let k = 0; k < row.length; ++k) out[k + shift] += amplitude * fir[i] * row[k];
    });
    return out;
  }

  /** Largest sum that the line code's sequences can take off the main cursor: the longest path
   *  through its trellis, for every position of the main symbol and both directions. */
  function codedIsi(residual) {
    const code = trial.code;
    const order = Array.from(residual).reverse();    // the last cursor is sent first
    const mainAt = order.length - 1 - main;
    let worst = -Infinity;
    const starts = [];
    code.sections.reduce((at, section) => (starts.push(at), at + section.length), 0);
    for (const up of [false, true]) {
      for (let position = 0; position < code.period; ++position) {
        // Place the characters so that the main symbol stands at `position` of one.
        let time = mainAt - position;
        while (time > 0) time -= code.period;
        let value = new Float64Array(code.sections[0].num_from);
        while (time < order.length) {
          for (const section of code.sections) {
            const next = new Float64Array(section.num_to).fill(-Infinity);
            for (const branch of section.branches) {
              let best = -Infinity;
              for (let w = branch.first; w < branch.last; ++w) {
                let sum = 0;
                for (let s = 0; s < section.length; ++s) {
                  const at = time + s;
                  if (at < 0 || at >= order.length) continue;
                  const symbol = section.words[w][s];
                  if (at === mainAt) {
                    if (up ? symbol > 1 - 1e-12 : symbol < -1 + 1e-12) sum = -Infinity;
                  } else {
                    sum += (up ? symbol : -symbol) * order[at];
                  }
                }
                if (sum > best) best = sum;
              }
              if (value[branch.from] + best > next[branch.to]) next[branch.to] = value[branch.from] + best;
            }
            value = next;
            time += section.length;
          }
        }
        for (const v of value) if (v > worst) worst = v;
      }
    }
    return worst;
  }

  function independentIsi(residual) {
    let sum = 0;
    for (let k = 0; k < residual.length; ++k) if (k !== main) sum += Math.abs(residual[k]);
    return sum;
  }

  function settledTap(tap, wanted, mainV) {
    const unit = tap.relative ? Math.abs(mainV) : 1;
    if (!tap.codes) return Math.max(-tap.max * unit, Math.min(tap.max * unit, wanted));
    let best = 0, distance = Infinity;
    for (const code of tap.codes) {
      const d = Math.abs(code * unit - wanted);
      if (d < distance || (d === distance && Math.abs(code) < Math.abs(best / unit))) {
        distance = d;
        best = code * unit;
      }
    }
    return best;
  }

  function crosstalk(state, fir, amplitude) {
    let total = 0;
    state.aggressors.forEach((pulse, a) => {
      const info = trial.aggressors[a];
      const c = info.fir || fir, level = info.amplitude_v === null ? amplitude : info.amplitude_v;
      const spacing = info.ui_ratio * perUi;
      const at = (x) => {
        const below = Math.floor(x), share = x - below;
        return (1 - share) * sample(pulse, below) + share * sample(pulse, below + 1);
      };
      const rows = Math.ceil(pulse.length / spacing) + 1 + last - first;
      let worst = 0;
      for (let phase = 0; phase < Math.ceil(spacing - 1e-9); ++phase) {
        let sum = 0;
        for (let k = 0; k < rows; ++k) {
          let x = 0;
          taps.forEach((tap, i) => { x += c[i] * at((k + first - tap.position) * spacing + phase); });
          sum += Math.abs(x);
        }
        worst = Math.max(worst, level * sum);
      }
      total += worst;
    });
    return total;
  }

  /** Worst-case eye height in volts of one setting. */
  function evaluate(setting) {
    const state = trial.states[setting.state];
    const amplitude = trial.swings_v[setting.swing];
    const rowAt = (offset) => filtered(spanRow(state.pulse, state.peak_index + setting.phase + offset), setting.fir, amplitude);
    const q = rowAt(0);
    const dfe = trial.dfe.map((tap, i) => {
      if (!setting.dfe_on) return 0;
      return setting.dfe_v ? setting.dfe_v[i]
                           : settledTap(tap, main + tap.position < numRows ? q[main + tap.position] : 0, q[main]);
    });
    let worst = Infinity, residual = null;
    for (let offset = -trial.mask_reach; offset <= trial.mask_reach; ++offset) {
      const r = offset === 0 ? q.slice() : rowAt(offset);
      let beyond = 0;
      trial.dfe.forEach((tap, i) => {
        if (main + tap.position < numRows) r[main + tap.position] -= dfe[i];
        else beyond += Math.abs(dfe[i]);
      });
      let dual = 0, squares = 0;
      if (trial.random_ui > 0 || trial.dual_dirac_peak_ui > 0) {
        const plus = rowAt(offset + 1), minus = rowAt(offset - 1);
        for (let k = 0; k < numRows; ++k) {
          const slope = (plus[k] - minus[k]) * perUi / 2;
          dual += Math.abs(slope);
          squares += slope * slope;
        }
      }
      const transmitter = trial.transmitter_noise_ratio * r[main];
      const sigma = Math.sqrt(state.noise_v ** 2 + transmitter ** 2 + trial.random_ui ** 2 * trial.symbol_variance * squares);
      const isi = (trial.code ? codedIsi(r) : independentIsi(r)) + beyond;
      const height = 2 * (r[main] * trial.signal_share - isi - trial.dual_dirac_peak_ui * dual - trial.quantile * sigma - trial.sensitivity_v);
      if (height < worst) worst = height;
      if (offset === 0) residual = r;
    }
    return { height_v: worst - 2 * crosstalk(state, setting.fir, amplitude), residual, dfe };
  }

  function withRemainder(fir) {
    taps.forEach((tap, i) => {
      if (tap.is_remainder) fir[i] = trial.peak_limit - fir.reduce((s, c, j) => (j === i ? s : s + Math.abs(c)), 0);
    });
    return fir;
  }

  const answer = trial.answer;
  const setting = { ...answer, fir: answer.fir.slice(), dfe_v: answer.dfe_v.slice(), dfe_on: true };
  const element = (id) => document.getElementById(id);

  function show() {
    const result = evaluate(setting);
    const sum = setting.fir.reduce((s, c) => s + Math.abs(c), 0);
    const mv = (v) => (1e3 * v).toFixed(1) + " mV";
    element("trial-height").textContent = mv(result.height_v);
    element("trial-change").textContent = (result.height_v >= trial.height_v ? "+" : "") + mv(result.height_v - trial.height_v);
    const over = sum > trial.peak_limit + 1e-9;
    element("trial-limit").textContent =
      "sum of |taps| " + sum.toFixed(4) + " of " + trial.peak_limit + (over ? ", over the limit" : "");
    element("trial-limit").className = over ? "bad" : "soft";
    element("trial-dfe-values").textContent =
      trial.dfe.length ? result.dfe.map((d) => (1e3 * d).toFixed(1)).join(", ") + " mV" : "";
    taps.forEach((tap, i) => { element("trial-fir-" + i + "-out").textContent = setting.fir[i].toFixed(4); });
    element("trial-phase-out").textContent = (setting.phase / perUi).toFixed(3) + " UI";
    const k = [...result.residual.keys()];
    drawFigure({
      id: "trial-pulse", x: { label: "cursor, UI from the sampling instant", logarithmic: false, min: -6, max: 20 },
      y: { label: "after FIR and DFE (mV)", logarithmic: false, min: null, max: null }, guides: [], boxes: [], field: null, bars: null,
      series: [{ name: "cursors of this setting", kind: "stems", colour: 1, dashed: false, x: k.map((i) => i - main), y: k.map((i) => 1e3 * result.residual[i]) },
               { name: "cursors of the answer", kind: "points", colour: 0, dashed: false, x: k.map((i) => i - main), y: trial.residual_v.map((v) => 1e3 * v) }],
    });
    return result;
  }

  taps.forEach((tap, i) => {
    const slider = element("trial-fir-" + i);
    if (!slider) return;
    slider.addEventListener("input", () => {
      setting.fir[i] = tap.codes ? tap.codes[Number(slider.value)] : Number(slider.value);
      withRemainder(setting.fir);
      setting.dfe_v = null;                         // the DFE follows from here on
      show();
    });
  });
  element("trial-state").addEventListener("change", (event) => {
    setting.state = Number(event.target.value);
    setting.dfe_v = null;
    show();
  });
  element("trial-swing").addEventListener("change", (event) => {
    setting.swing = Number(event.target.value);
    setting.dfe_v = null;
    show();
  });
  element("trial-dfe").addEventListener("change", (event) => {
    setting.dfe_on = event.target.checked;
    show();
  });
  element("trial-phase").addEventListener("input", (event) => {
    setting.phase = Number(event.target.value);
    setting.dfe_v = null;
    show();
  });
  element("trial-reset").addEventListener("click", () => {
    Object.assign(setting, answer, { fir: answer.fir.slice(), dfe_v: answer.dfe_v.slice(), dfe_on: true });
    taps.forEach((tap, i) => {
      const slider = element("trial-fir-" + i);
      if (slider) slider.value = tap.codes ? tap.codes.indexOf(setting.fir[i]) : setting.fir[i];
    });
    element("trial-state").value = setting.state;
    element("trial-swing").value = setting.swing;
    element("trial-dfe").checked = true;
    element("trial-phase").value = setting.phase;
    show();
  });
  window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", show);
  show();
  window.tapwrightTrial = { evaluate, withRemainder, answer };  // for checks from a console
})();
