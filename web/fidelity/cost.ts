// What a frame costs the main thread: the engine's step and the renderer's
// calls, with the software renderer's own time apart.

import { Engine } from "../participant/engine.js";
import { Renderer, type Geometry } from "../participant/render.js";

export interface Cost {
  main: number[]; // ms a frame: engine and drawing calls
  raster: number[]; // ms a frame until the picture is there
  dots: number;
  patches: number;
  float: boolean;
}

/** Takes a run to its first trial and plays that trial's frames again and again. */
export async function frameCost(code: string, study: string, records: object[], frames: number, geometry: Geometry): Promise<Cost> {
  const engine = await Engine.load(await (await fetch(code)).arrayBuffer());
  engine.open(study, "0000000000000001", 0, 0);
  for (const record of records) {
    if (engine.next().step === "trial") break;
    engine.apply(record);
  }
  const plan = engine.next().trial;
  if (!plan) throw new Error("the run does not come to a trial");
  const canvas = document.createElement("canvas");
  document.getElementById("distal")!.replaceChildren(canvas);
  const renderer = new Renderer(canvas, geometry, false);
  renderer.resize(1920, 1080);
  const gl = canvas.getContext("webgl2")!;
  const pixel = new Uint8Array(4);
  const cost: Cost = { main: [], raster: [], dots: 0, patches: 0, float: renderer.floatTarget };
  for (let i = 0; i < frames; i++) {
    await new Promise((r) => requestAnimationFrame(r));
    const at = i % plan.stimulus_frames;
    if (at === 0) engine.beginTrial();
    const before = performance.now();
    const list = engine.frame(at === 0 ? 0 : 1);
    renderer.draw(list);
    const drawn = performance.now();
    gl.readPixels(0, 0, 1, 1, gl.RGBA, gl.UNSIGNED_BYTE, pixel);
    cost.main.push(drawn - before);
    cost.raster.push(performance.now() - drawn);
    cost.dots = Math.max(cost.dots, list.dotCount);
    cost.patches = Math.max(cost.patches, list.patchCount);
  }
  gl.getExtension("WEBGL_lose_context")?.loseContext();
  return cost;
}
