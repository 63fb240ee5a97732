// The numbers of a page, unpacked: the other half of viz/packing.py.

export async function unpack(base64, directory) {
  const stream = new Blob([bytesOf(base64)]).stream().pipeThrough(new DecompressionStream("gzip"));
  const bytes = new Uint8Array(await new Response(stream).arrayBuffer());
  const arrays = {};
  for (const [name, entry] of Object.entries(directory)) arrays[name] = channelsOf(bytes, entry);
  return arrays;
}

function bytesOf(base64) {
  if (Uint8Array.fromBase64) return Uint8Array.fromBase64(base64);
  const text = atob(base64);
  const bytes = new Uint8Array(text.length);
  for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
  return bytes;
}

// One Float64Array per channel; NaN where missing.
function channelsOf(bytes, { channels, length, step, order, width, start, at, missing }) {
  const total = channels * length;
  const found = [];
  for (let c = 0; c < channels; c++) {
    const values = new Float64Array(length);
    let slope = 0;
    let level = start[c];
    for (let i = 0; i < length; i++) {
      const here = c * length + i;
      let folded = 0;
      for (let plane = width - 1; plane >= 0; plane--) {
        folded = folded * 256 + bytes[at + plane * total + here];
      }
      const change = folded % 2 ? -(folded + 1) / 2 : folded / 2;
      if (order === 2) {
        slope += change;
        level += slope;
      } else {
        level += change;
      }
      const gone =
        missing !== undefined && (bytes[missing + (here >> 3)] >> (7 - (here & 7))) & 1;
      values[i] = gone ? NaN : level * step;
    }
    found.push(values);
  }
  return found;
}
