// What the fidelity measurements load into the browser: the participant's own
// renderer and trial code, and the means to read back what they made.

import type { DisplayList } from "../participant/engine.js";
import { Renderer, type Geometry } from "../participant/render.js";
import { frameCost } from "./cost.js";
import { runMarked } from "./trial.js";

export interface Picture {
  dots: number[]; // 4 a dot
  patches: number[]; // 12 a patch
  batches: number[]; // 3 a batch
}

let renderer: Renderer | null = null;
let geometryNow: Geometry | null = null;
let canvas: HTMLCanvasElement | null = null;

function base64(bytes: Uint8Array): string {
  let text = "";
  for (let i = 0; i < bytes.length; i += 32768) text += String.fromCharCode(...bytes.subarray(i, i + 32768));
  return btoa(text);
}

function context(): WebGL2RenderingContext {
  return canvas!.getContext("webgl2")!;
}

function asList(p: Picture): DisplayList {
  return {
    dots: new Float32Array(p.dots), dotCount: p.dots.length / 4,
    patches: new Float32Array(p.patches), patchCount: p.patches.length / 12,
    batches: new Int32Array(p.batches), batchCount: p.batches.length / 3,
  };
}

/** A fresh canvas that fills the window as in a trial. */
function open(geometry: Geometry, dither: boolean) {
  geometryNow = geometry;
  if (canvas) context().getExtension("WEBGL_lose_context")?.loseContext();
  canvas?.remove();
  canvas = document.createElement("canvas");
  document.getElementById("distal")!.replaceChildren(canvas);
  renderer = new Renderer(canvas, geometry, true, dither);
  renderer.resize(Math.round(innerWidth * devicePixelRatio), Math.round(innerHeight * devicePixelRatio));
  return { width: canvas.width, height: canvas.height, pixelRatio: devicePixelRatio, floatTarget: renderer.floatTarget, background: renderer.backgroundLight, renderer: renderer.name };
}

/** Bytes of the red channel as they go to the screen, from the upper left. */
function grey(): Uint8Array {
  const { width, height } = canvas!;
  const all = new Uint8Array(4 * width * height);
  const gl = context();
  gl.bindFramebuffer(gl.FRAMEBUFFER, null);
  gl.readPixels(0, 0, width, height, gl.RGBA, gl.UNSIGNED_BYTE, all);
  const out = new Uint8Array(width * height);
  for (let y = 0, o = 0; y < height; y++) {
    for (let x = 0, i = 4 * width * (height - 1 - y); x < width; x++, i += 4) out[o++] = all[i]!;
  }
  return out;
}

/** Linear light as fractions of white, from the upper left. */
function light(): Float32Array {
  const { width, height } = canvas!;
  const all = renderer!.readLight();
  const out = new Float32Array(width * height);
  for (let y = 0, o = 0; y < height; y++) {
    for (let x = 0, i = 4 * width * (height - 1 - y); x < width; x++, i += 4) out[o++] = all[i]!;
  }
  return out;
}

/** Takes the drawing context away and gives it back, as a driver's restart does. */
async function loseContext(): Promise<boolean> {
  const c = canvas!;
  const extension = context().getExtension("WEBGL_lose_context")!;
  const lost = new Promise((r) => canvas!.addEventListener("webglcontextlost", (e) => { e.preventDefault(); r(null); }, { once: true }));
  extension.loseContext();
  await lost;
  const seen = renderer!.lost;
  renderer!.draw(null);
  await new Promise((r) => setTimeout(r));
  const back = new Promise((r) => canvas!.addEventListener("webglcontextrestored", r, { once: true }));
  extension.restoreContext();
  await back;
  if (!renderer!.lost) return false;
  // The participant's page makes a new renderer for a restored context.
  renderer = new Renderer(c, geometryNow!, true, false);
  renderer.resize(c.width, c.height);
  return seen;
}

/** From now on new contexts are without these extensions, as on lesser graphics. */
function withhold(...names: string[]): boolean {
  const kind = WebGL2RenderingContext.prototype;
  const given = kind.getExtension as (name: string) => unknown;
  kind.getExtension = function (this: WebGL2RenderingContext, name: string) {
    return names.includes(name) ? null : given.call(this, name);
  } as typeof kind.getExtension;
  return true;
}

const bench = {

  open,
  withhold,
  loseContext,
  runMarked,
  frameCost,
  draw: (p: Picture) => renderer!.draw(asList(p)),
  grey: (p: Picture) => { renderer!.draw(asList(p)); return base64(grey()); },
  light: (p: Picture) => { renderer!.draw(asList(p)); return base64(new Uint8Array(light().buffer)); },
  /** Sums of the grey values' counts over frames, pixel classes apart: how often each of 256 values stood in each cell. */
  histogram: (p: Picture, frames: number, cells: { x: number; y: number; width: number; height: number }[]) => {
    const counts = cells.map(() => new Array<number>(256).fill(0));
    const list = asList(p);
    for (let f = 0; f < frames; f++) {
      renderer!.draw(list);
      const g = grey();
      cells.forEach((c, k) => {
        for (let y = c.y; y < c.y + c.height; y++) for (let x = c.x; x < c.x + c.width; x++) counts[k]![g[y * canvas!.width + x]!]!++;
      });
    }
    return counts;
  },
};

declare global {
  interface Window { bench: typeof bench }
}

window.bench = bench;
