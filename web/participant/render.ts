// Draws display lists on a WebGL2 canvas at device resolution: blending in
// linear light in a float target, then one pass through the transfer function
// with noise dithering to 8 bits (noisy-bit method: Allard and Faubert 2008,
// Behav Res Methods 40:735).
//
// Projection: a point at (x, y) degrees about fixation lies on the flat screen
// at D·tan x to the right and D·tan y above, D being the viewing distance. A
// dot keeps its angular size: its radius on the screen is half of
// D·(tan(x + r) − tan(x − r)) in each direction.
//
// A disc's edge is the integral of a triangle two device pixels wide: with t = (1 − q)·R clamped to −1 … 1,
// coverage = 0.5 + t − t·|t|/2, q being the distance from the centre in radii and R the drawn mean radius in
// device pixels. A smoothed disc holds the light of π(R² + 1/6), so the drawn radius is √(r² − 1/6) for a true
// radius r; below 1.5 pixels it stays 1.5 and the contrast is scaled instead. A disc moved by a fraction of a
// pixel moves its luminance centroid by as much within 0.008 px, with its light right within half a per cent; a
// linear edge one pixel wide is six times worse. Package inspection defines and tests the same in Go.

import type { DisplayList } from "./engine.js";

export interface Geometry {
  devicePxPerMm: number;
  distanceMm: number;
  backgroundFraction: number; // mean luminance as a fraction of white, linear
  gamma: number | null; // exponent of a measured display, null for sRGB
}

const dotVertex = `#version 300 es
precision highp float;
layout(location = 0) in vec2 corner;
layout(location = 1) in vec4 dot; // x, y, diameter (deg), contrast
uniform vec2 halfSize; // of the canvas, device px
uniform float pxPerTan; // device px per unit of tangent
flat out vec2 centre; // device px about fixation
flat out vec2 radii;
flat out float contrast;
const float rad = 0.017453292519943295;
void main() {
  vec2 c = dot.xy * rad;
  float r = dot.z * 0.5 * rad;
  vec2 low = tan(c - r), high = tan(c + r);
  centre = tan(c) * pxPerTan;
  radii = 0.5 * (high - low) * pxPerTan;
  float exact2 = radii.x * radii.y;
  float radius = max(1.5, sqrt(max(exact2 - 1.0 / 6.0, 0.0)));
  contrast = dot.w * min(1.0, exact2 / (radius * radius + 1.0 / 6.0));
  radii *= radius / sqrt(exact2);
  vec2 px = centre + corner * (radii * (1.0 + 1.0 / radius) + 1.0);
  gl_Position = vec4(px / halfSize, 0.0, 1.0);
}`;

const dotFragment = `#version 300 es
precision highp float;
flat in vec2 centre;
flat in vec2 radii;
flat in float contrast;
uniform vec2 halfSize;
uniform float background;
out vec4 colour;
void main() {
  // From the pixel's own place: interpolated corners may be off by a sixteenth of a pixel.
  float q = length((gl_FragCoord.xy - halfSize - centre) / radii);
  float t = clamp((1.0 - q) * sqrt(radii.x * radii.y), -1.0, 1.0);
  float coverage = 0.5 + t - 0.5 * t * abs(t);
  colour = vec4(vec3(background * (1.0 + contrast)), coverage);
}`;

const patchVertex = `#version 300 es
precision highp float;
layout(location = 0) in vec2 corner;
layout(location = 1) in vec4 place; // x, y, width, height (deg)
layout(location = 2) in vec4 carrier; // orientation (deg), frequency (c/deg), phase (rad), contrast
layout(location = 3) in vec4 form; // ramp (deg), carrier, window, mode
uniform vec2 halfSize;
uniform float pxPerTan;
flat out vec4 vPlace;
flat out vec4 vCarrier;
flat out vec4 vForm;
const float rad = 0.017453292519943295;
void main() {
  vPlace = place; vCarrier = carrier; vForm = form;
  float reach = form.z > 2.5 ? 80.0 : form.z > 1.5 ? 1.5 * length(place.zw) : 0.5 * length(place.zw) + 0.1;
  vec2 at = clamp(place.xy + corner * reach, vec2(-80.0), vec2(80.0));
  gl_Position = vec4(tan(at * rad) * pxPerTan / halfSize, 0.0, 1.0);
}`;

const patchFragment = `#version 300 es
precision highp float;
flat in vec4 vPlace;
flat in vec4 vCarrier;
flat in vec4 vForm;
uniform vec2 halfSize;
uniform float pxPerTan;
uniform float background;
out vec4 colour;
const float pi = 3.141592653589793;
float ramp(float inside, float width, float pixel) { // inside: deg from the edge
  if (width > pixel) return inside <= 0.0 ? 0.0 : inside >= width ? 1.0 : 0.5 * (1.0 - cos(pi * inside / width));
  return clamp(0.5 + inside / pixel, 0.0, 1.0);
}
void main() {
  vec2 deg = degrees(atan((gl_FragCoord.xy - halfSize) / pxPerTan));
  vec2 d = deg - vPlace.xy;
  float angle = radians(vCarrier.x);
  vec2 uv = vec2(d.x * cos(angle) + d.y * sin(angle), d.y * cos(angle) - d.x * sin(angle));
  float pixel = degrees(1.0 / pxPerTan);
  vec2 size = 0.5 * vPlace.zw;
  float window;
  if (vForm.z < 0.5 || vForm.z > 2.5 && vForm.z < 3.5) {
    float q = length(uv / size);
    window = ramp((1.0 - q) * min(size.x, size.y), vForm.x, pixel);
  } else if (vForm.z < 1.5 || vForm.z > 3.5) {
    vec2 inside = size - abs(uv);
    window = ramp(inside.x, vForm.x, pixel) * ramp(inside.y, vForm.x, pixel);
  } else {
    vec2 q = uv / size; // standard deviations
    window = dot(q, q) > 9.0 ? 0.0 : exp(-0.5 * dot(q, q));
  }
  if (vForm.z > 2.5) window = 1.0 - window;
  float phase = 2.0 * pi * vCarrier.y * uv.x + vCarrier.z;
  float wave = 1.0;
  if (vForm.y > 0.5) {
    wave = sin(phase);
    float square = wave >= 0.0 ? 1.0 : -1.0;
    if (vForm.y > 2.5) wave = square - 4.0 / pi * wave;
    else if (vForm.y > 1.5) wave = square;
  }
  if (vForm.w < 0.5) colour = vec4(vec3(background * vCarrier.w * wave * window), 0.0);
  else colour = vec4(vec3(background * (1.0 + vCarrier.w * wave) * window), window);
}`;

const finalVertex = `#version 300 es
layout(location = 0) in vec2 corner;
void main() { gl_Position = vec4(corner, 0.0, 1.0); }`;

const finalFragment = `#version 300 es
precision highp float;
precision highp int;
uniform highp sampler2D light;
uniform highp sampler2D levelLight; // linear light of each grey level, 256 × 1
uniform float gamma; // 0: sRGB
uniform uint frame;
uniform bool dither;
out vec4 colour;
uint mixBits(uint x) { x ^= x >> 16; x *= 0x7feb352du; x ^= x >> 15; x *= 0x846ca68bu; x ^= x >> 16; return x; }
void main() {
  ivec2 at = ivec2(gl_FragCoord.xy);
  float l = clamp(texelFetch(light, at, 0).r, 0.0, 1.0);
  float v = gamma > 0.0 ? pow(l, 1.0 / gamma) : l <= 0.0031308 ? 12.92 * l : 1.055 * pow(l, 1.0 / 2.4) - 0.055;
  if (dither) {
    uint h = mixBits(uint(at.x) ^ mixBits(uint(at.y) ^ mixBits(frame)));
    // Between two grey levels the brighter is shown with the probability that makes the mean luminance right.
    int low = clamp(int(v * 255.0), 0, 254);
    float lowL = texelFetch(levelLight, ivec2(low, 0), 0).r, highL = texelFetch(levelLight, ivec2(low + 1, 0), 0).r;
    float share = clamp((l - lowL) / (highL - lowL), 0.0, 1.0);
    // A value that is a grey level already stays: the background is even.
    if (share < 0.002) share = 0.0;
    if (share > 0.998) share = 1.0;
    v = (float(low) + (float(h >> 8) / 16777216.0 < share ? 1.0 : 0.0)) / 255.0;
  }
  colour = vec4(v, v, v, 1.0);
}`;

/** Linear light, as a fraction of white, that a display shows for a value of 0 … 1. */
function lightOf(value: number, gamma: number | null): number {
  if (gamma) return Math.pow(value, gamma);
  return value <= 0.04045 ? value / 12.92 : Math.pow((value + 0.055) / 1.055, 2.4);
}

/** The grey level (0 … 255) whose light is nearest to a fraction of white. */
function nearestLevel(fraction: number, gamma: number | null): number {
  let best = 0;
  for (let i = 1; i < 256; i++) {
    if (Math.abs(lightOf(i / 255, gamma) - fraction) < Math.abs(lightOf(best / 255, gamma) - fraction)) best = i;
  }
  return best;
}

/** How far (deg) from its centre a patch can change the picture: as its vertex shader has it. */
function patchReach(window: number, width: number, height: number): number {
  const diagonal = Math.hypot(width, height);
  return window > 2.5 ? 80 : window > 1.5 ? 1.5 * diagonal : 0.5 * diagonal + 0.1;
}

export class Renderer {
  readonly floatTarget: boolean;
  private readonly format: number; // of the target
  readonly name: string;
  private readonly gl: WebGL2RenderingContext;
  private readonly dotProgram: WebGLProgram;
  private readonly patchProgram: WebGLProgram;
  private readonly finalProgram: WebGLProgram;
  private readonly dotArray: WebGLVertexArrayObject;
  private readonly patchArray: WebGLVertexArrayObject;
  private readonly finalArray: WebGLVertexArrayObject;
  private readonly dotBuffer: WebGLBuffer;
  private readonly patchBuffer: WebGLBuffer;
  private readonly target: WebGLFramebuffer;
  private texture: WebGLTexture | null = null;
  private width = 0;
  private height = 0;
  private frameNumber = 0;
  private dead: boolean;
  private readonly levelTexture: WebGLTexture;
  private background = 0; // linear light, fraction of white
  private backgroundValue = 0; // what the screen is sent for it, 0 … 1
  // Rectangle (device px from the lower left) beyond which a list leaves the background.
  private left = 0;
  private right = 0;
  private bottom = 0;
  private top = 0;
  private dotRoom = 0;
  private patchRoom = 0;
  private readonly uniforms: Map<WebGLProgram, Record<string, WebGLUniformLocation | null>> = new Map();

  constructor(readonly canvas: HTMLCanvasElement, private geometry: Geometry, keep = false, private readonly dither = true) {
    const gl = canvas.getContext("webgl2", { alpha: false, antialias: false, depth: false, stencil: false, desynchronized: true, preserveDrawingBuffer: keep, powerPreference: "high-performance" });
    if (!gl) throw new Error("WebGL2 is missing");
    this.gl = gl;
    this.dead = gl.isContextLost();
    canvas.addEventListener("webglcontextlost", () => (this.dead = true), { once: true });
    // Blending in 32-bit floats needs a second extension. 16 bits still hold negative light and steps below an 8-bit grey level; 8 bits hold neither.
    const float = gl.getExtension("EXT_color_buffer_float") !== null;
    const wide = float && gl.getExtension("EXT_float_blend") !== null;
    this.floatTarget = float || gl.getExtension("EXT_color_buffer_half_float") !== null;
    this.format = wide ? gl.R32F : float ? gl.R16F : this.floatTarget ? gl.RGBA16F : gl.RGBA8;
    const info = gl.getExtension("WEBGL_debug_renderer_info");
    this.name = `${String(gl.getParameter(info ? info.UNMASKED_RENDERER_WEBGL : gl.RENDERER)).slice(0, 160)}; ${wide ? 32 : this.floatTarget ? 16 : 8}-bit target`
      + (gl.getContextAttributes()?.desynchronized ? "; low latency" : "");
    this.dotProgram = this.program(dotVertex, dotFragment);
    this.patchProgram = this.program(patchVertex, patchFragment);
    this.finalProgram = this.program(finalVertex, finalFragment);
    const quad = this.buffer(new Float32Array([-1, -1, 1, -1, -1, 1, 1, 1]));
    this.dotBuffer = gl.createBuffer()!;
    this.patchBuffer = gl.createBuffer()!;
    this.dotArray = this.vertexArray(quad, this.dotBuffer, 1);
    this.patchArray = this.vertexArray(quad, this.patchBuffer, 3);
    this.finalArray = this.vertexArray(quad, null, 0);
    this.target = gl.createFramebuffer()!;
    this.levelTexture = gl.createTexture()!;
    gl.useProgram(this.finalProgram);
    gl.uniform1i(this.uniforms.get(this.finalProgram)!["levelLight"]!, 1);
    this.setGeometry(geometry);
  }

  /**
   * Sets what a degree is and how the display turns values into light. A
   * dithered background is the nearest grey level, so that all of it is even
   * and only what a display covers needs drawing; contrasts refer to it.
   */
  setGeometry(geometry: Geometry): void {
    const gl = this.gl;
    this.geometry = geometry;
    const levels = Float32Array.from({ length: 256 }, (_, i) => lightOf(i / 255, geometry.gamma));
    const nearest = nearestLevel(geometry.backgroundFraction, geometry.gamma);
    this.background = this.dither ? levels[nearest]! : geometry.backgroundFraction;
    this.backgroundValue = nearest / 255;
    gl.activeTexture(gl.TEXTURE1);
    gl.bindTexture(gl.TEXTURE_2D, this.levelTexture);
    gl.texImage2D(gl.TEXTURE_2D, 0, gl.R32F, 256, 1, 0, gl.RED, gl.FLOAT, levels);
    gl.texParameteri(gl.TEXTURE_2D, gl.TEXTURE_MIN_FILTER, gl.NEAREST);
    gl.texParameteri(gl.TEXTURE_2D, gl.TEXTURE_MAG_FILTER, gl.NEAREST);
    gl.activeTexture(gl.TEXTURE0);
  }

  /** Fits the canvas to a size in device pixels, one of its pixels to one of the screen: CSS sizes alone would have it scaled. */
  resize(width: number, height: number): void {
    const gl = this.gl;
    this.canvas.style.width = `${width / devicePixelRatio}px`;
    this.canvas.style.height = `${height / devicePixelRatio}px`;
    if (width === this.width && height === this.height) return;
    this.width = this.canvas.width = width;
    this.height = this.canvas.height = height;
    gl.deleteTexture(this.texture);
    this.texture = gl.createTexture();
    gl.bindTexture(gl.TEXTURE_2D, this.texture);
    gl.texStorage2D(gl.TEXTURE_2D, 1, this.format, width, height);
    gl.texParameteri(gl.TEXTURE_2D, gl.TEXTURE_MIN_FILTER, gl.NEAREST);
    gl.texParameteri(gl.TEXTURE_2D, gl.TEXTURE_MAG_FILTER, gl.NEAREST);
    gl.bindFramebuffer(gl.FRAMEBUFFER, this.target);
    gl.framebufferTexture2D(gl.FRAMEBUFFER, gl.COLOR_ATTACHMENT0, gl.TEXTURE_2D, this.texture, 0);
    gl.viewport(0, 0, width, height);
    this.warmUp();
  }

  /** Draws one unseen dot and patch: drivers finish their programs at the first use, which must not be an onset. */
  private warmUp(): void {
    const dots = new Float32Array(4), patches = new Float32Array(12);
    dots[2] = patches[2] = patches[3] = 1;
    this.draw({ dots, dotCount: 1, patches, patchCount: 1, batches: new Int32Array([0, 0, 1, 1, 0, 1]), batchCount: 2 });
    this.gl.finish();
  }

  /** Linear light of the background as a fraction of white. */
  get backgroundLight(): number {
    return this.background;
  }

  /** Stays true when the context comes back: what this renderer had is gone, a new one is needed. */
  get lost(): boolean {
    return this.dead || this.gl.isContextLost();
  }

  /** Draws a list, or the background alone. */
  draw(list: DisplayList | null): void {
    const gl = this.gl;
    const g = this.geometry;
    gl.bindFramebuffer(gl.FRAMEBUFFER, null);
    gl.clearColor(this.backgroundValue, this.backgroundValue, this.backgroundValue, 1);
    gl.clear(gl.COLOR_BUFFER_BIT);
    this.frameNumber++;
    if (!this.bound(list)) return;
    gl.enable(gl.SCISSOR_TEST);
    gl.scissor(this.left, this.bottom, this.right - this.left, this.top - this.bottom);
    gl.bindFramebuffer(gl.FRAMEBUFFER, this.target);
    gl.clearColor(this.background, this.background, this.background, 1);
    gl.clear(gl.COLOR_BUFFER_BIT);
    gl.enable(gl.BLEND);
    this.upload(list);
    for (let i = 0; i < list.batchCount; i++) {
      this.batch(list.batches[3 * i]!, list.batches[3 * i + 1]!, list.batches[3 * i + 2]!);
    }
    gl.disable(gl.BLEND);
    gl.bindFramebuffer(gl.FRAMEBUFFER, null);
    gl.useProgram(this.finalProgram);
    const u = this.uniforms.get(this.finalProgram)!;
    gl.uniform1f(u["gamma"]!, g.gamma ?? 0);
    gl.uniform1ui(u["frame"]!, this.frameNumber);
    gl.uniform1i(u["dither"]!, this.dither ? 1 : 0);
    gl.bindVertexArray(this.finalArray);
    gl.drawArrays(gl.TRIANGLE_STRIP, 0, 4);
    gl.disable(gl.SCISSOR_TEST);
  }

  /** Finds the rectangle that a list can change; false if none of it is on the canvas. */
  private bound(list: DisplayList | null): list is DisplayList {
    this.left = this.right = 0;
    if (!list || list.batchCount === 0) return false;
    let left = Infinity, right = -Infinity, bottom = Infinity, top = -Infinity;
    const { dots, patches } = list;
    for (let i = 0; i < 4 * list.dotCount; i += 4) {
      const x = dots[i]!, y = dots[i + 1]!, reach = 0.5 * dots[i + 2]!;
      left = Math.min(left, x - reach); right = Math.max(right, x + reach);
      bottom = Math.min(bottom, y - reach); top = Math.max(top, y + reach);
    }
    for (let i = 0; i < 12 * list.patchCount; i += 12) {
      const x = patches[i]!, y = patches[i + 1]!, reach = patchReach(patches[i + 10]!, patches[i + 2]!, patches[i + 3]!);
      left = Math.min(left, x - reach); right = Math.max(right, x + reach);
      bottom = Math.min(bottom, y - reach); top = Math.max(top, y + reach);
    }
    this.left = this.pixel(left, -1, this.width); this.right = this.pixel(right, 1, this.width);
    this.bottom = this.pixel(bottom, -1, this.height); this.top = this.pixel(top, 1, this.height);
    return this.right > this.left && this.top > this.bottom;
  }

  /** The device pixel at an angle, moved outward by what the smoothing of edges needs. */
  private pixel(deg: number, outward: number, size: number): number {
    const angle = Math.max(-80, Math.min(80, deg)) * (Math.PI / 180);
    const at = size / 2 + Math.tan(angle) * this.geometry.devicePxPerMm * this.geometry.distanceMm + 4 * outward;
    return Math.max(0, Math.min(size, outward < 0 ? Math.floor(at) : Math.ceil(at)));
  }

  /** Linear light of the last frame as fractions of white, for tests; row 0 is the bottom, red holds it. */
  readLight(): Float32Array {
    const gl = this.gl;
    const out = new Float32Array(4 * this.width * this.height).fill(this.background);
    const width = this.right - this.left, rows = this.top - this.bottom;
    if (width <= 0 || rows <= 0) return out;
    const drawn = new Float32Array(4 * width * rows);
    gl.bindFramebuffer(gl.FRAMEBUFFER, this.target);
    gl.readPixels(this.left, this.bottom, width, rows, gl.RGBA, gl.FLOAT, drawn);
    for (let y = 0; y < rows; y++) out.set(drawn.subarray(4 * width * y, 4 * width * (y + 1)), 4 * ((this.bottom + y) * this.width + this.left));
    return out;
  }

  private upload(list: DisplayList): void {
    const gl = this.gl;
    if (list.dotCount > 0) {
      gl.bindBuffer(gl.ARRAY_BUFFER, this.dotBuffer);
      if (list.dots.length > this.dotRoom) {
        this.dotRoom = list.dots.length;
        gl.bufferData(gl.ARRAY_BUFFER, 4 * this.dotRoom, gl.STREAM_DRAW);
      }
      gl.bufferSubData(gl.ARRAY_BUFFER, 0, list.dots);
    }
    if (list.patchCount > 0) {
      gl.bindBuffer(gl.ARRAY_BUFFER, this.patchBuffer);
      if (list.patches.length > this.patchRoom) {
        this.patchRoom = list.patches.length;
        gl.bufferData(gl.ARRAY_BUFFER, 4 * this.patchRoom, gl.STREAM_DRAW);
      }
      gl.bufferSubData(gl.ARRAY_BUFFER, 0, list.patches);
    }
  }

  private batch(kind: number, first: number, count: number): void {
    const gl = this.gl;
    const dots = kind === 0;
    const program = dots ? this.dotProgram : this.patchProgram;
    gl.useProgram(program);
    const u = this.uniforms.get(program)!;
    const g = this.geometry;
    gl.uniform2f(u["halfSize"]!, this.width / 2, this.height / 2);
    gl.uniform1f(u["pxPerTan"]!, g.devicePxPerMm * g.distanceMm);
    gl.uniform1f(u["background"]!, this.background);
    gl.bindVertexArray(dots ? this.dotArray : this.patchArray);
    gl.bindBuffer(gl.ARRAY_BUFFER, dots ? this.dotBuffer : this.patchBuffer);
    const groups = dots ? 1 : 3;
    for (let i = 0; i < groups; i++) {
      gl.vertexAttribPointer(i + 1, 4, gl.FLOAT, false, 16 * groups, 16 * groups * first + 16 * i);
    }
    // Dots cover with their coverage; patches bring their own weight (premultiplied).
    if (dots) gl.blendFunc(gl.SRC_ALPHA, gl.ONE_MINUS_SRC_ALPHA);
    else gl.blendFunc(gl.ONE, gl.ONE_MINUS_SRC_ALPHA);
    gl.drawArraysInstanced(gl.TRIANGLE_STRIP, 0, 4, count);
  }

  private buffer(data: Float32Array): WebGLBuffer {
    const gl = this.gl;
    const b = gl.createBuffer()!;
    gl.bindBuffer(gl.ARRAY_BUFFER, b);
    gl.bufferData(gl.ARRAY_BUFFER, data, gl.STATIC_DRAW);
    return b;
  }

  private vertexArray(quad: WebGLBuffer, instances: WebGLBuffer | null, groups: number): WebGLVertexArrayObject {
    const gl = this.gl;
    const array = gl.createVertexArray()!;
    gl.bindVertexArray(array);
    gl.bindBuffer(gl.ARRAY_BUFFER, quad);
    gl.enableVertexAttribArray(0);
    gl.vertexAttribPointer(0, 2, gl.FLOAT, false, 0, 0);
    if (instances) gl.bindBuffer(gl.ARRAY_BUFFER, instances);
    for (let i = 0; i < groups; i++) {
      gl.enableVertexAttribArray(i + 1);
      gl.vertexAttribPointer(i + 1, 4, gl.FLOAT, false, 16 * groups, 16 * i);
      gl.vertexAttribDivisor(i + 1, 1);
    }
    return array;
  }

  private program(vertex: string, fragment: string): WebGLProgram {
    const gl = this.gl;
    const p = gl.createProgram()!;
    for (const [kind, source] of [[gl.VERTEX_SHADER, vertex], [gl.FRAGMENT_SHADER, fragment]] as const) {
      const shader = gl.createShader(kind)!;
      gl.shaderSource(shader, source);
      gl.compileShader(shader);
      if (!gl.getShaderParameter(shader, gl.COMPILE_STATUS) && !gl.isContextLost()) {
        const numbered = source.split("\n").map((line, i) => `${i + 1}: ${line}`).join("\n");
        throw new Error(`shader: ${gl.getShaderInfoLog(shader)}\n${numbered}`);
      }
      gl.attachShader(p, shader);
    }
    gl.linkProgram(p);
    if (!gl.getProgramParameter(p, gl.LINK_STATUS) && !gl.isContextLost()) throw new Error(`shader program: ${gl.getProgramInfoLog(p)}`);
    const names: Record<string, WebGLUniformLocation | null> = {};
    for (const name of ["halfSize", "pxPerTan", "background", "gamma", "frame", "dither", "light", "levelLight"]) names[name] = gl.getUniformLocation(p, name);
    this.uniforms.set(p, names);
    return p;
  }
}
