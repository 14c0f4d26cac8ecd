"use strict";
// The live panel: propagates the waveforms under the errors that the sliders say, in the page.
// H/hbar = 1/2 [(1 + eps)(Wx sx + Wy sy) + delta sz]; a slice of constant drive is one quaternion
// (w, x, y, z) = (cos h, sin(h)/h * half the turn); products are written like matrices.
(() => {
  const data = JSON.parse(document.getElementById("live-data").textContent);
  const svgNames = "http://www.w3.org/2000/svg";
  const mostPoints = 4000; // of a drawn path
  const arrows = 9; // along a path
  const onEquator = 0.02; // |z| below which a start or end is marked on both discs
  const byId = (id) => document.getElementById(id);

  function product(p, q) {
    return [
      p[0] * q[0] - p[1] * q[1] - p[2] * q[2] - p[3] * q[3],
      p[0] * q[1] + p[1] * q[0] + p[2] * q[3] - p[3] * q[2],
      p[0] * q[2] - p[1] * q[3] + p[2] * q[0] + p[3] * q[1],
      p[0] * q[3] + p[1] * q[2] - p[2] * q[1] + p[3] * q[0],
    ];
  }

  function slice(rate, seconds, eps, delta) {
    const x = 0.5 * seconds * rate[0] * (1 + eps);
    const y = 0.5 * seconds * rate[1] * (1 + eps);
    const z = 0.5 * seconds * delta;
    const h = Math.hypot(x, y, z);
    const s = h > 1e-8 ? Math.sin(h) / h : 1 - (h * h) / 6;
    return [Math.cos(h), s * x, s * y, s * z];
  }

  function propagator(pulse, eps, delta) {
    return pulse.rates.reduce(
      (total, rate, k) => product(slice(rate, pulse.durations[k], eps, delta), total),
      [1, 0, 0, 0],
    );
  }

  function infidelity(q, target) {
    let sum = 0;
    for (const row of target.error_rows) {
      const part = row.reduce((total, value, k) => total + value * q[k], 0);
      sum += part * part;
    }
    return target.scale * sum;
  }

  // --- more levels than two: the qubit's two columns of the propagator, complex numbers as pairs

  // One segment on the columns [level][column] by the Taylor series of the exponential, in parts
  // short enough for it. H is tridiagonal: delta (1/2 - n) + anharmonicity n (n - 1) / 2 on the
  // diagonal, (Wx - i Wy) sqrt(n) / 2 beside it.
  function ladderSegment(v, rate, seconds, eps, delta, seen) {
    const { levels, anharmonicity } = data.ladder;
    const [wx, wy] = [0.5 * rate[0] * (1 + eps), -0.5 * rate[1] * (1 + eps)];
    const rise = Math.hypot(wx, wy) * (Math.sqrt(levels - 1) + Math.sqrt(levels - 2));
    const still = Array.from({ length: levels },
      (_, n) => delta * (0.5 - n) + (anharmonicity * n * (n - 1)) / 2);
    const norm = Math.max(...still.map(Math.abs)) + rise;
    const parts = Math.max(1, Math.ceil((norm * seconds) / 0.7));
    const step = seconds / parts;
    for (let part = 0; part < parts; part += 1) {
      let term = v.slice();
      for (let k = 1; k < 25; k += 1) {
        const next = new Float64Array(v.length);
        for (let n = 0; n < levels; n += 1) {
          const [up, down] = [Math.sqrt(n + 1), Math.sqrt(n)];
          for (let c = 0; c < 2; c += 1) {
            const at = 4 * n + 2 * c;
            let re = still[n] * term[at];
            let im = still[n] * term[at + 1];
            if (n + 1 < levels) { // (wx + i wy) sqrt(n + 1) from the level above
              re += up * (wx * term[at + 4] - wy * term[at + 5]);
              im += up * (wx * term[at + 5] + wy * term[at + 4]);
            }
            if (n > 0) { // its conjugate from the level below
              re += down * (wx * term[at - 4] + wy * term[at - 3]);
              im += down * (wx * term[at - 3] - wy * term[at - 4]);
            }
            next[at] = (im * step) / k; // -i (re + i im)
            next[at + 1] = (-re * step) / k;
          }
        }
        term = next;
        let largest = 0;
        for (let j = 0; j < v.length; j += 1) {
          v[j] += term[j];
          largest = Math.max(largest, Math.abs(term[j]));
        }
        if (largest < 1e-19) break;
      }
      if (seen) seen(v);
    }
  }

  function ladderColumns(pulse, eps, delta, seen) {
    const v = new Float64Array(4 * data.ladder.levels);
    v[0] = 1; // |0> to |0>
    v[6] = 1; // |1> to |1>
    pulse.rates.forEach((rate, k) => ladderSegment(v, rate, pulse.durations[k], eps, delta, seen));
    return v;
  }

  // Pedersen's formula: squares of three error components, and half of what is found outside.
  function ladderInfidelity(v) {
    let lost = 0;
    for (const row of data.ladder.rows) { // [i][j] pairs
      let [re, im] = [0, 0];
      row.forEach((line, i) => line.forEach(([a, b], j) => {
        const at = 4 * i + 2 * j;
        re += a * v[at] - b * v[at + 1];
        im += a * v[at + 1] + b * v[at];
      }));
      lost += re * re + im * im;
    }
    for (let at = 8; at < v.length; at += 1) lost += 0.5 * v[at] * v[at];
    return lost;
  }

  // Direction of the qubit's part of the state that began along a Bloch vector.
  function ladderBloch(v, begin) {
    const a = Math.sqrt(Math.max(0, (1 + begin[2]) / 2));
    const b = a > 1e-9 ? [begin[0] / (2 * a), begin[1] / (2 * a)] : [1, 0];
    const part = (n) => [
      a * v[4 * n] + b[0] * v[4 * n + 2] - b[1] * v[4 * n + 3],
      a * v[4 * n + 1] + b[0] * v[4 * n + 3] + b[1] * v[4 * n + 2],
    ];
    const [p, q] = [part(0), part(1)];
    const way = [
      2 * (p[0] * q[0] + p[1] * q[1]),
      2 * (p[0] * q[1] - p[1] * q[0]),
      p[0] * p[0] + p[1] * p[1] - q[0] * q[0] - q[1] * q[1],
    ];
    const length = Math.hypot(...way);
    return way.map((part_) => part_ / length);
  }

  function judged(pulse, target, eps, delta) {
    if (data.ladder) return ladderInfidelity(ladderColumns(pulse, eps, delta));
    return infidelity(propagator(pulse, eps, delta), target);
  }

  function turned(q, v) {
    const [w, x, y, z] = q;
    const cross = [y * v[2] - z * v[1], z * v[0] - x * v[2], x * v[1] - y * v[0]];
    const again = [
      y * cross[2] - z * cross[1], z * cross[0] - x * cross[2], x * cross[1] - y * cross[0],
    ];
    return v.map((value, k) => value + 2 * (w * cross[k] + again[k]));
  }

  // The way of a Bloch vector: points at most three degrees apart, wider for very long pulses.
  function path(pulse, start, eps, delta) {
    if (data.ladder) {
      const way = [start];
      ladderColumns(pulse, eps, delta, (v) => way.push(ladderBloch(v, start)));
      return way;
    }
    const angles = pulse.rates.map((rate, k) =>
      Math.hypot(Math.hypot(...rate) * (1 + eps), delta) * pulse.durations[k]);
    const whole = angles.reduce((a, b) => a + b, 0);
    const step = Math.max(Math.PI / 60, whole / mostPoints);
    const points = [start];
    let total = [1, 0, 0, 0];
    pulse.rates.forEach((rate, k) => {
      const cuts = Math.max(1, Math.ceil(angles[k] / step));
      const fine = slice(rate, pulse.durations[k] / cuts, eps, delta);
      for (let j = 0; j < cuts; j += 1) {
        total = product(fine, total);
        points.push(turned(total, start));
      }
    });
    return points;
  }

  // z(theta) as y(+90), x(theta), y(-90) on the sample grid: each arc rounded up to whole samples,
  // its amplitude lowered so that the angle stays exact, then rounded to DAC codes.
  function sandwichPulse(theta) {
    const { rabi_max: most, sample_rate: clock, largest_code: top, bound } = data.drive;
    if (Math.abs(theta) < 1e-12) return { rates: [[0, 0]], durations: [1 / clock] };
    const middle = theta < 1e-9 - Math.PI ? theta + 2 * Math.PI : theta; // -180 is played as 180
    const tilt = bound === "box" ? Math.PI / 4 : 0; // both lines at their bound: faster
    const ceiling = bound === "box" ? most * Math.SQRT2 : most;
    const arcs = [[Math.PI / 2, Math.PI / 2], [middle, 0], [-Math.PI / 2, Math.PI / 2]];
    const pulse = { rates: [], durations: [] };
    for (const [angle, axis] of arcs) {
      const exact = (Math.abs(angle) / ceiling) * clock;
      const samples = Math.max(1, Math.ceil(exact * (1 - 1e-9)));
      const size = Math.min((Math.abs(angle) * clock) / samples, ceiling) * Math.sign(angle);
      const code = (part) => (Math.round(Math.min((size * part) / most, 1) * top) / top) * most;
      const direction = [Math.cos(axis + tilt), Math.sin(axis + tilt)];
      pulse.rates.push(direction.map((part) => (Math.abs(part) < 1e-12 ? 0 : code(part))));
      pulse.durations.push(samples / clock);
    }
    return pulse;
  }

  function zTarget(theta) {
    const [c, s] = [Math.cos(theta / 2), Math.sin(theta / 2)];
    // rows of the vector part of q * conj(z(theta))
    return {
      scale: data.qubits[0].scale,
      error_rows: [[0, c, -s, 0], [0, s, c, 0], [-s, 0, 0, c]],
    };
  }

  // Lambert's azimuthal equal-area projection; the equator is the unit circle, y points up.
  function onDisc(v, north) {
    const stretch = 1 / Math.sqrt(1 + Math.max(north ? v[2] : -v[2], 0));
    return [v[0] * stretch, -v[1] * stretch];
  }

  function element(name, attributes, parent) {
    const made = document.createElementNS(svgNames, name);
    for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
    parent.appendChild(made);
    return made;
  }

  function emptyDisc(svg, north) {
    svg.replaceChildren();
    for (const degrees of [30, 60]) {
      const height = Math.sin((degrees * Math.PI) / 180);
      const radius = Math.sqrt(1 - height);
      element("circle", { r: radius, class: "rule" }, svg);
      const text = element("text", {
        x: radius * 0.707, y: radius * 0.707, class: "degrees",
      }, svg);
      text.textContent = `${north ? "" : "−"}${degrees}°`;
    }
    for (let k = 0; k < 4; k += 1) {
      const [c, s] = [Math.cos((k * Math.PI) / 4), Math.sin((k * Math.PI) / 4)];
      element("line", { x1: -c, y1: -s, x2: c, y2: s, class: "rule" }, svg);
    }
    element("circle", { r: 1, class: "edge" }, svg);
    for (const [label, x, y] of [["+x", 1.14, 0], ["−x", -1.14, 0], ["+y", 0, -1.12], ["−y", 0, 1.12]]) {
      element("text", { x, y, class: "axis" }, svg).textContent = label;
    }
  }

  function drawPath(svg, points, north) {
    emptyDisc(svg, north);
    const inside = points.map((v) => (north ? v[2] >= -1e-9 : v[2] <= 1e-9));
    let line = "";
    let pen = "M";
    const travelled = [0];
    points.forEach((v, k) => {
      if (inside[k]) {
        const [x, y] = onDisc(v, north);
        line += `${pen}${x.toFixed(4)} ${y.toFixed(4)}`;
      }
      pen = inside[k] ? "L" : "M";
      if (k > 0) {
        const u = points[k - 1];
        travelled.push(travelled[k - 1] + Math.hypot(v[0] - u[0], v[1] - u[1], v[2] - u[2]));
      }
    });
    element("path", { d: line, class: "way" }, svg);
    const whole = travelled[travelled.length - 1];
    for (let j = 0; j < arrows && whole > 0; j += 1) {
      const k = travelled.findIndex((value) => value >= ((j + 0.5) / arrows) * whole);
      if (k < 1 || !inside[k] || !inside[k - 1]) continue;
      const [a, b] = [onDisc(points[k - 1], north), onDisc(points[k], north)];
      const angle = (Math.atan2(b[1] - a[1], b[0] - a[0]) * 180) / Math.PI;
      element("path", {
        d: "M0.05 0L-0.035 0.035L-0.035 -0.035Z", class: "arrow",
        transform: `translate(${b[0].toFixed(4)} ${b[1].toFixed(4)}) rotate(${angle.toFixed(1)})`,
      }, svg);
    }
    const [first, last] = [points[0], points[points.length - 1]];
    const height = (v) => (north ? v[2] : -v[2]);
    if (height(first) > -onEquator) {
      const [cx, cy] = onDisc(first, north);
      element("circle", { cx, cy, r: 0.05, class: "start" }, svg);
    }
    if (height(last) > -onEquator) {
      const [x, y] = onDisc(last, north);
      element("path", {
        d: "M-0.06 -0.06L0.06 0.06M-0.06 0.06L0.06 -0.06", class: "end",
        transform: `translate(${x} ${y})`,
      }, svg);
    }
  }

  const superscript = (text) => text.replace(/[-0-9]/g, (c) => "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"["-0123456789".indexOf(c)]);

  function scientific(value) {
    const [digits, power] = value.toExponential(2).split("e");
    return `${digits} × 10${superscript(String(Number(power)))}`;
  }

  const vector = (v) => `(${v.map((c) => (c.toFixed(3) === "-0.000" ? "0.000" : c.toFixed(3)).replace("-", "−")).join(", ")})`;

  const amplitude = byId("amplitude");
  const detuning = byId("detuning");
  const theta = byId("theta"); // only there for z rotations with a sandwich
  const other = byId("other");
  const start = byId("start");
  const qubit = byId("qubit"); // only there if the pulse acts on several

  function show(side, name, pulse, target, eps, delta) {
    const value = judged(pulse, target, eps, delta);
    byId(`${side}-name`).textContent = name;
    byId(`${side}-infidelity`).textContent = scientific(value);
    byId(`${side}-digits`).textContent = value.toExponential(12);
    const points = path(pulse, data.starts[Number(start.value)].bloch, eps, delta);
    drawPath(byId(`${side}-north`), points, true);
    drawPath(byId(`${side}-south`), points, false);
    byId(`${side}-end`).textContent = vector(points[points.length - 1]);
  }

  function update() {
    const eps = Number(amplitude.value) / 100;
    const addressed = data.qubits[qubit ? Number(qubit.value) : 0];
    const delta = addressed.detuning + Number(detuning.value) * data.detuning_unit;
    const said = {
      amplitude: `${amplitude.value} %`,
      detuning: `${detuning.value} ${data.detuning_unit_name}`,
    };
    const second = data.pulses[Number(other.value)];
    let [name, pulse, target] = [second.name, second, addressed];
    if (theta) {
      const isSandwich = second.name === "sandwich";
      theta.disabled = !isSandwich || addressed !== data.qubits[0];
      said.theta = `${theta.value} degrees`;
      if (!theta.disabled && Number(theta.value) !== data.z_angle_deg) {
        const angle = (Number(theta.value) * Math.PI) / 180;
        [name, pulse, target] = [`sandwich, z(${theta.value})`, sandwichPulse(angle), zTarget(angle)];
      }
    }
    for (const [id, text] of Object.entries(said)) {
      byId(`${id}-shown`).textContent = text.replace("-", "−");
      byId(id).setAttribute("aria-valuetext", text);
    }
    for (const place of document.querySelectorAll(".measure")) place.textContent = addressed.measure;
    show("first", data.pulses[0].name, data.pulses[0], addressed, eps, delta);
    show("second", name, pulse, target, eps, delta);
  }

  for (const control of [amplitude, detuning, theta, other, start, qubit]) {
    if (control) control.addEventListener("input", update);
  }
  byId("reset").addEventListener("click", () => {
    amplitude.value = 0;
    detuning.value = 0;
    if (theta) theta.value = data.z_angle_deg;
    update();
  });
  byId("live").hidden = false;
  update();
})();
