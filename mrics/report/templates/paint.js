// Painting: lattice numbers -> colours -> a panel's canvas.

const little = new Uint8Array(new Uint32Array([1]).buffer)[0] === 1;

function packed(r, g, b) {
  return little ? (255 << 24 | b << 16 | g << 8 | r) >>> 0 : (r << 24 | g << 16 | b << 8 | 255) >>> 0;
}

const signed = (() => {
  const bytes = Uint8Array.from(atob(study.colours), (c) => c.charCodeAt(0));
  return Uint32Array.from({ length: 255 }, (_, i) => packed(bytes[3 * i], bytes[3 * i + 1], bytes[3 * i + 2]));
})();

// Colours of measures: entry 0 (black) where there is no value, then viridis.
const measureColours = (() => {
  const bytes = Uint8Array.from(atob(study.ramp), (c) => c.charCodeAt(0));
  const colours = Uint32Array.from({ length: 256 }, (_, i) => packed(bytes[3 * i], bytes[3 * i + 1], bytes[3 * i + 2]));
  colours[0] = packed(0, 0, 0);
  return colours;
})();

const BLUE = [86, 180, 233];
const ORANGE = [240, 150, 30];

// Grey level (0-255) of every lattice number for a window, made once per window.
function greyLevels(step, low, high) {
  const levels = new Uint8Array(32768);
  const scale = high > low ? 255 / (high - low) : 0;
  for (let n = 0; n < levels.length; n += 1) {
    levels[n] = Math.max(0, Math.min(255, Math.round((n * step - low) * scale)));
  }
  return levels;
}

// An off-screen image of one slice in the scan's own pixels.
class Raster {
  constructor(rows, columns) {
    this.canvas = document.createElement("canvas");
    this.canvas.width = columns;
    this.canvas.height = rows;
    this.context = this.canvas.getContext("2d");
    this.image = this.context.createImageData(columns, rows);
    this.pixels = new Uint32Array(this.image.data.buffer);
  }

  finish() {
    this.context.putImageData(this.image, 0, 0);
    return this.canvas;
  }

  // Magnitude: reference numbers plus, for a recovered image, its differences.
  grey(levels, truth, change) {
    for (let i = 0; i < this.pixels.length; i += 1) {
      const number = truth[i] + (change ? change[i] : 0);
      const g = levels[number];
      this.pixels[i] = packed(g, g, g);
    }
    return this.finish();
  }

  // Signed difference of two stacks (the second may be null), full colour at +-end.
  difference(change, less, step, end) {
    const scale = 127 * step / end;
    for (let i = 0; i < this.pixels.length; i += 1) {
      const d = change[i] - (less ? less[i] : 0);
      this.pixels[i] = signed[Math.max(0, Math.min(254, Math.round(127 + d * scale)))];
    }
    return this.finish();
  }

  // A measure of quality, its numbers from 0 (none) to 255.
  measure(numbers) {
    for (let i = 0; i < this.pixels.length; i += 1) this.pixels[i] = measureColours[numbers[i]];
    return this.finish();
  }

  // Magnitude with the error laid over it, opaque at +-end and clear at 0.
  overlay(levels, truth, change, step, end) {
    for (let i = 0; i < this.pixels.length; i += 1) {
      const d = change[i];
      const g = levels[truth[i] + d];
      const share = Math.min(1, Math.abs(d) * step / end);
      const tint = d < 0 ? BLUE : ORANGE;
      this.pixels[i] = packed(
        Math.round(g + share * (tint[0] - g)),
        Math.round(g + share * (tint[1] - g)),
        Math.round(g + share * (tint[2] - g)),
      );
    }
    return this.finish();
  }
}

// The part of a slice that is in view, in pixels of the slice.
function viewRect(rows, columns, zoom, centre) {
  const width = columns / zoom;
  const height = rows / zoom;
  const left = Math.max(0, Math.min(columns - width, centre[0] * columns - width / 2));
  const top = Math.max(0, Math.min(rows - height, centre[1] * rows - height / 2));
  return { left, top, width, height };
}

function drawRaster(canvas, raster, rect, from = 0, to = 1) {
  const context = canvas.getContext("2d");
  context.imageSmoothingEnabled = false;
  const { width, height } = canvas;
  context.save();
  context.beginPath();
  context.rect(Math.round(from * width), 0, Math.round(to * width) - Math.round(from * width), height);
  context.clip();
  context.drawImage(raster, rect.left, rect.top, rect.width, rect.height, 0, 0, width, height);
  context.restore();
}
