// Unpacks what the page carries and answers questions about it. One deflated block holds a
// JSON header and number columns (see columns.rs for how they are written).

async function unpack(text) {
  const raw = atob(text.trim());
  const packed = new Uint8Array(raw.length);
  for (let k = 0; k < raw.length; k++) packed[k] = raw.charCodeAt(k);
  const stream = new Blob([packed]).stream().pipeThrough(new DecompressionStream("deflate"));
  const plain = new Uint8Array(await new Response(stream).arrayBuffer());
  const length = new DataView(plain.buffer).getUint32(0, true);
  const header = JSON.parse(new TextDecoder().decode(plain.subarray(4, 4 + length)));
  let at = 4 + length;
  const columns = {};
  for (const spec of header.columns) {
    const out = new Int32Array(spec.n);
    for (let plane = 0; plane < spec.planes; plane++) {
      for (let k = 0; k < spec.n; k++) out[k] |= plain[at + k] << (8 * plane);
      at += spec.n;
    }
    let previous = 0;
    for (let k = 0; k < spec.n; k++) {
      const step = (out[k] >>> 1) ^ -(out[k] & 1);
      previous = spec.delta ? (previous + step) | 0 : step;
      out[k] = previous;
    }
    columns[spec.name] = out;
  }
  return makeRun(header, columns);
}

function startsOf(counts) {
  const starts = new Int32Array(counts.length + 1);
  for (let k = 0; k < counts.length; k++) starts[k + 1] = starts[k] + counts[k];
  return starts;
}

function makeRun(header, c) {
  const T = header.tracks;
  const nTracks = T.name.length;
  const quantum = header.quantum_mas;
  const epochStart = startsOf(header.epochs.map((e) => e.shown));
  const trackStart = startsOf(c.track_rows);
  const nDet = epochStart[epochStart.length - 1];
  const nMem = trackStart[nTracks];

  const epochOfDet = new Uint16Array(nDet);
  header.epochs.forEach((_, e) => epochOfDet.fill(e, epochStart[e], epochStart[e + 1]));
  const detOfMem = new Int32Array(nMem);
  const trackOfMem = new Int32Array(nMem);
  const holders = new Int32Array(nDet + 1);
  for (let k = 0; k < nTracks; k++) trackOfMem.fill(k, trackStart[k], trackStart[k + 1]);
  for (let m = 0; m < nMem; m++) {
    detOfMem[m] = epochStart[c.mem_epoch[m]] + c.mem_det[m];
    holders[detOfMem[m] + 1]++;
  }
  for (let d = 0; d < nDet; d++) holders[d + 1] += holders[d];
  const memsOfDet = new Int32Array(nMem);
  const fill = holders.slice();
  for (let m = 0; m < nMem; m++) memsOfDet[fill[detOfMem[m]]++] = m;

  const times = header.epochs.map((e) => e.time_yr);
  const byTime = times.map((_, e) => e).sort((a, b) => times[a] - times[b] || a - b);
  const bits = {};
  for (const f of header.flags) bits[f.word] = f.bit;
  const confusedBits = bits.ambiguous | bits.crossing | bits.unproven | bits.capped;
  const trackByName = new Map(T.name.map((name, k) => [name, k]));

  const run = {
    header, T, nTracks, nDet, nMem, epochs: header.epochs, times, byTime, bits,
    epochStart, trackStart, epochOfDet, detOfMem, trackOfMem, trackByName,
    firstYr: Math.min(...times), lastYr: Math.max(...times),
    x: (d) => c.det_x[d] * quantum,
    y: (d) => c.det_y[d] * quantum,
    xErr: (d) => c.det_x_err[d] / 1000,
    yErr: (d) => c.det_y_err[d] / 1000,
    mag: (d) => (c.det_mag[d] === header.no_mag ? null : c.det_mag[d] / 1000),
    magErr: (d) => (c.det_mag_err[d] === header.no_mag ? null : c.det_mag_err[d] / 1000),
    prob: (m) => c.mem_prob[m] / 10000,
    share: (m) => c.mem_share[m] / 100000,
    dx: (m) => c.mem_dx[m] * quantum,
    dy: (m) => c.mem_dy[m] * quantum,
    memFlags: (m) => c.mem_flags[m],
    isConfused: (k) => (T.flags[k] & confusedBits) !== 0 || T.tangle[k] >= 0,
  };

  // Rows (members) that hold a detection.
  run.holders = (d) => memsOfDet.subarray(holders[d], holders[d + 1]);
  run.nHolders = (d) => holders[d + 1] - holders[d];
  run.detName = (d) => {
    const e = epochOfDet[d];
    const ids = header.epochs[e].ids;
    return ids ? ids[d - epochStart[e]] : String(c.det_id[d]);
  };
  run.flagWords = (f) => header.flags.filter((row) => f & row.bit).map((row) => row.word);

  // Predicted place of a track.
  run.place = (k, t) => {
    const path = header.paths[k];
    if (path) return [alongPath(path, "x_mas", t), alongPath(path, "y_mas", t)];
    const p = T.sky[k];
    const dt = t - header.reference_yr;
    return [p[0] + dt * (p[2] + 0.5 * dt * p[4]), p[1] + dt * (p[3] + 0.5 * dt * p[5])];
  };
  run.placeErr = (k, t) => {
    const path = header.paths[k];
    if (path) return [alongPath(path, "x_err_mas", t), alongPath(path, "y_err_mas", t)];
    const dt = t - header.reference_yr;
    return [0, 6].map((o) => Math.sqrt(Math.max(0, quadratic(T.cov[k], o, dt))));
  };
  // Times at which a path is drawn, close enough for its curve.
  run.pathTimes = (k, t0, t1) => {
    const path = header.paths[k];
    if (path) {
      return [t0, ...path.t_yr.filter((t) => t > t0 && t < t1), t1];
    }
    const n = T.kind[k] === 0 ? 1 : 24;
    return Array.from({ length: n + 1 }, (_, i) => t0 + ((t1 - t0) * i) / n);
  };
  run.nearestEpoch = (t) => {
    let best = byTime[0];
    for (const e of byTime) if (Math.abs(times[e] - t) < Math.abs(times[best] - t)) best = e;
    return best;
  };
  // Detections of an epoch within a radius of a place.
  run.near = (e, x, y, radius) => {
    const found = [];
    for (let d = epochStart[e]; d < epochStart[e + 1]; d++) {
      const dx = run.x(d) - x;
      const dy = run.y(d) - y;
      if (dx * dx + dy * dy <= radius * radius) found.push(d);
    }
    return found;
  };
  run.extra = (name) => header.extras.find((e) => e.name === name) || null;
  return run;
}

// Variance of x + v dt + a dt^2/2 from (xx, xv, xa, vv, va, aa) at offset o.
function quadratic(cov, o, dt) {
  const h = 0.5 * dt * dt;
  return cov[o] + 2 * dt * cov[o + 1] + 2 * h * cov[o + 2] + dt * dt * cov[o + 3]
    + 2 * dt * h * cov[o + 4] + h * h * cov[o + 5];
}

function alongPath(path, column, t) {
  const times = path.t_yr;
  let low = 0;
  let high = times.length - 1;
  while (high - low > 1) {
    const middle = (low + high) >> 1;
    if (times[middle] <= t) low = middle;
    else high = middle;
  }
  const share = Math.min(1, Math.max(0, (t - times[low]) / (times[high] - times[low])));
  return path[column][low] * (1 - share) + path[column][high] * share;
}

function insideOutline(outline, x, y) {
  if (outline.length < 3) return true;
  let inside = false;
  for (let k = 0, j = outline.length - 1; k < outline.length; j = k++) {
    const [xa, ya] = outline[k];
    const [xb, yb] = outline[j];
    if (ya > y !== yb > y && x < ((xb - xa) * (y - ya)) / (yb - ya) + xa) inside = !inside;
  }
  return inside;
}
