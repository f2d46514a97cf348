// All positions of a recording, sent once: per droplet its frames, places and whether they were used.

export function readTracks(buffer) {
  const rows = new DataView(buffer).getUint32(0, true);
  const droplet = new Int32Array(buffer, 4, rows), frame = new Int32Array(buffer, 4 + 4 * rows, rows);
  const x = new Float32Array(buffer, 4 + 8 * rows, rows), y = new Float32Array(buffer, 4 + 12 * rows, rows);
  const used = new Uint8Array(buffer, 4 + 16 * rows, rows);
  const tracks = new Map();
  for (let start = 0; start < rows;) {
    let end = start;
    while (end < rows && droplet[end] === droplet[start]) end++;
    tracks.set(droplet[start], {
      droplet: droplet[start], frame: frame.subarray(start, end), x: x.subarray(start, end),
      y: y.subarray(start, end), used: used.subarray(start, end),
    });
    start = end;
  }
  return tracks;
}

// Last row at or before a frame; -1 if there is none.
export function rowAt(track, frame) {
  let low = 0, high = track.frame.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (track.frame[middle] <= frame) low = middle + 1;
    else high = middle;
  }
  return low - 1;
}

export function nearestFrame(times, time) {
  let low = 0, high = times.length - 1;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (times[middle] < time) low = middle + 1;
    else high = middle;
  }
  return low > 0 && time - times[low - 1] < times[low] - time ? low - 1 : low;
}

// Where a droplet is in a frame, or null if it was not seen there.
export function placeAt(track, frame) {
  const row = rowAt(track, frame);
  return row >= 0 && track.frame[row] === frame ? { x: track.x[row], y: track.y[row], used: track.used[row] === 1 } : null;
}
