// Arrays in the NPY format (versions 1 to 3), as float32: pictures and traces need no more digits.

export function parseNpy(buffer) {
  const bytes = new Uint8Array(buffer);
  if (bytes.length < 12 || String.fromCharCode(...bytes.subarray(1, 6)) !== "NUMPY") throw new Error("not an NPY file");
  const view = new DataView(buffer);
  const wide = bytes[6] > 1;
  const start = wide ? 12 : 10;
  const offset = start + (wide ? view.getUint32(8, true) : view.getUint16(8, true));
  const header = new TextDecoder("latin1").decode(bytes.subarray(start, offset));
  const kind = /'descr': *'([<>|]f[48])'/.exec(header);
  const shape = /'shape': *\(([^)]*)\)/.exec(header);
  if (!kind || !shape || /'fortran_order': *True/.test(header)) throw new Error(`cannot read ${header.slice(0, 80)}`);
  return { shape: shape[1].split(",").filter((part) => part.trim()).map(Number), values: numbers(view, offset, kind[1]) };
}

function numbers(view, offset, kind) {
  const size = Number(kind[2]);
  const count = (view.byteLength - offset) / size;
  const values = new Float32Array(count);
  const little = kind[0] !== ">";
  for (let i = 0; i < count; i += 1) {
    const at = offset + i * size;
    values[i] = size === 4 ? view.getFloat32(at, little) : view.getFloat64(at, little);
  }
  return values;
}
