(() => {
'use strict';
// The page is whole without this script; it only makes the pictures follow the slider and the probe.
const page = document.documentElement;
const SVG = 'http://www.w3.org/2000/svg';
const PAPER = [246, 244, 238], HATCH = [124, 133, 140], FADE = 0.68;
const POORLY_COVERED = 2, MESH_DEPENDENT = 1;
const PAD = {left: 54, right: 84, top: 18, bottom: 40};
const TICKS = [0, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10000];
const tables = {};

const bytes = text => {
  if (Uint8Array.fromBase64) return Uint8Array.fromBase64(text.trim());
  const letters = atob(text.trim()), found = new Uint8Array(letters.length);
  for (let i = 0; i < letters.length; i++) found[i] = letters.charCodeAt(i);
  return found;
};

// Codes of a stack of fields: inflated, planes of bytes joined, left differences summed.
async function unpack(text, about) {
  const stream = new Blob([bytes(text)]).stream().pipeThrough(new DecompressionStream('deflate'));
  const raw = new Uint8Array(await new Response(stream).arrayBuffer());
  const n = about.count * about.nz * about.nx;
  if (raw.length !== n * about.bytes) throw Error(`a stack holds ${raw.length} bytes, not ${n * about.bytes}`);
  let codes = raw;
  if (about.bytes === 2) {
    codes = new Uint16Array(n);
    for (let i = 0; i < n; i++) codes[i] = raw[i] << 8 | raw[n + i];
  }
  for (let row = 0; row < n; row += about.nx) {
    for (let i = row + 1; i < row + about.nx; i++) codes[i] += codes[i - 1];
  }
  return codes;
}

class Stack {
  constructor(codes, about) { this.codes = codes; this.about = about; this.size = about.nz * about.nx; }
  step(i) { return (this.about.high[i] - this.about.low[i]) / (2 ** (8 * this.about.bytes) - 2); }
  field(i) {
    const values = new Float32Array(this.size), low = this.about.low[i], step = this.step(i);
    for (let n = 0, from = i * this.size; n < this.size; n++) {
      const code = this.codes[from + n];
      values[n] = code ? low + (code - 1) * step : NaN;
    }
    return {values, nz: this.about.nz, nx: this.about.nx};
  }
  // The value at a node of another grid of the same extent, bilinear.
  at(i, down, across) {
    const {nz, nx} = this.about, y = down * (nz - 1), x = across * (nx - 1);
    const j = Math.min(Math.floor(y), Math.max(nz - 2, 0)), k = Math.min(Math.floor(x), Math.max(nx - 2, 0));
    const low = this.about.low[i], step = this.step(i);
    const value = (r, c) => {
      const code = this.codes[i * this.size + Math.min(r, nz - 1) * nx + Math.min(c, nx - 1)];
      return code ? low + (code - 1) * step : NaN;
    };
    const b = y - j, a = x - k;
    let told = value(j, k);
    if (a > 1e-9) told += a * (value(j, k + 1) - told);
    if (b > 1e-9) {
      let under = value(j + 1, k);
      if (a > 1e-9) under += a * (value(j + 1, k + 1) - under);
      told += b * (under - told);
    }
    return told;
  }
}

const minus = text => text.replace('-', '\u2212');
const withUnit = (text, unit) => unit ? `${text} ${unit}` : text;
const labelled = (name, unit) => unit ? `${name} (${unit})` : name;
const digits = (value, n = 4) => Number.isFinite(value) ? minus(String(+value.toPrecision(n))) : '\u2013';

function element(name, attributes, text) {
  const made = document.createElementNS(SVG, name);
  for (const [key, value] of Object.entries(attributes)) made.setAttribute(key, value);
  if (text !== undefined) made.textContent = text;
  return made;
}

function ticks(low, high, wanted) {
  const rough = (high - low) / wanted;
  if (!(rough > 0)) return [low];
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = [1, 2, 5, 10].map(m => m * power).find(s => s >= rough * 0.8);
  const found = [];
  for (let n = Math.ceil(low / step - 1e-9); n * step <= high + step * 1e-6; n++) found.push(+(n * step).toPrecision(10));
  return found;
}

// One picture of the ground with axes, colour bar and probe: a section on a canvas.
class Section {
  // rays: the path of the static picture that holds them, if one does
  constructor(host, ground, places, rays) {
    Object.assign(this, {host, ground, places, probe: null, shownPlaces: true, shownRays: true});
    const layer = () => {
      const made = document.createElement('canvas');
      made.setAttribute('aria-hidden', 'true');
      return made;
    };
    this.canvas = layer();
    this.over = element('svg', {'aria-hidden': 'true'});
    host.append(this.canvas, this.over);
    if (rays) {
      // A canvas of their own, so that neither slider nor probe has to draw them again.
      Object.assign(this, {rays, rayCanvas: layer(), raysDrawn: ''});
      this.canvas.after(this.rayCanvas);
    }
  }
  drawRays() {
    if (!this.rays) return;
    const {rayCanvas: canvas, canvas: {width, height}, wide, high} = this, now = `${width} ${height} ${this.shownRays}`;
    if (this.raysDrawn === now) return;
    this.raysDrawn = now;
    Object.assign(canvas, {width, height});
    if (!this.shownRays) return;
    const [left, top, across, up] = this.rays.dataset.box.split(' ').map(Number), sharp = width / this.host.clientWidth;
    const path = new Path2D(), a = sharp * wide / across, d = sharp * high / up;
    path.addPath(new Path2D(this.rays.getAttribute('d')), {a, d, e: sharp * PAD.left - a * left, f: sharp * PAD.top - d * top});
    const context = canvas.getContext('2d'), style = getComputedStyle(this.rays);
    // The whole layer is faint, so that rays do not add up where they meet.
    canvas.style.opacity = style.strokeOpacity;
    context.strokeStyle = style.stroke;
    context.lineWidth = parseFloat(style.strokeWidth) * sharp;
    context.stroke(path);
  }
  fit(width, height) {
    const {distance: d, elevation: e, exaggeration} = this.ground;
    const ratio = (d[1] - d[0]) / ((e[0] - e[1]) * exaggeration);
    const across = Math.max(Math.min(width - PAD.left - PAD.right, (height - PAD.top - PAD.bottom) * ratio), 60);
    this.host.style.width = `${Math.round(across + PAD.left + PAD.right)}px`;
    this.host.style.height = `${Math.round(across / ratio + PAD.top + PAD.bottom)}px`;
  }
  x(distance) { const d = this.ground.distance; return PAD.left + (distance - d[0]) / (d[1] - d[0]) * this.wide; }
  y(elevation) { const e = this.ground.elevation; return PAD.top + (e[0] - elevation) / (e[0] - e[1]) * this.high; }
  surfaceAt(share) {
    const s = this.ground.surface;
    if (!s) return Infinity;
    const at = share * (s.length - 1), i = Math.min(Math.floor(at), s.length - 2);
    return s[i] + (at - i) * (s[i + 1] - s[i]);
  }
  node(event) {
    const box = this.host.getBoundingClientRect(), {nz, nx} = this.ground;
    const across = (event.clientX - box.left - PAD.left) / this.wide, down = (event.clientY - box.top - PAD.top) / this.high;
    if (across < 0 || across > 1 || down < 0 || down > 1) return null;
    return [Math.round(down * (nz - 1)), Math.round(across * (nx - 1))];
  }
  // sight: field, scale, table, flags, veiled, label
  draw(sight) {
    const sharp = Math.min(window.devicePixelRatio || 1, 2), box = this.host;
    const width = box.clientWidth, height = box.clientHeight;
    if (width < 120 || height < 80) return;
    this.wide = width - PAD.left - PAD.right;
    this.high = height - PAD.top - PAD.bottom;
    const w = Math.round(this.wide * sharp), h = Math.round(this.high * sharp), bar = Math.round(12 * sharp);
    const canvas = this.canvas;
    if (canvas.width !== Math.round(width * sharp) || canvas.height !== Math.round(height * sharp)) {
      canvas.width = Math.round(width * sharp);
      canvas.height = Math.round(height * sharp);
    }
    const context = canvas.getContext('2d', {willReadFrequently: true});
    const image = context.createImageData(w, h), out = image.data;
    const {values, nz, nx} = sight.field, [low, high] = sight.scale, table = sight.table;
    const grid = this.ground, flags = sight.flags, mask = flags.map(flag => flag ? 1 : 0), gain = 255 / (high - low);
    const columns = n => {
      const before = new Int32Array(w), weight = new Float32Array(w);
      for (let i = 0; i < w; i++) {
        const at = (i + 0.5) / w * (n - 1);
        before[i] = Math.min(Math.floor(at), n - 2);
        weight[i] = at - before[i];
      }
      return [before, weight];
    };
    const [k0, kw] = columns(nx), [f0, fw] = columns(grid.nx);
    const top = new Int32Array(w), e = grid.elevation;
    for (let i = 0; i < w; i++) top[i] = Math.ceil((e[0] - this.surfaceAt((i + 0.5) / w)) / (e[0] - e[1]) * h - 0.5);
    for (let row = 0, p = 0; row < h; row++) {
      const at = (row + 0.5) / h * (nz - 1), j = Math.min(Math.floor(at), nz - 2), b = at - j;
      const fine = (row + 0.5) / h * (grid.nz - 1), fj = Math.min(Math.floor(fine), grid.nz - 2), fb = fine - fj;
      const upper = j * nx, lower = upper + nx;
      const veilUpper = fj * grid.nx, veilLower = veilUpper + grid.nx;
      for (let i = 0; i < w; i++, p += 4) {
        if (row < top[i]) continue;
        const k = k0[i], a = kw[i];
        const u = values[upper + k] + a * (values[upper + k + 1] - values[upper + k]);
        const l = values[lower + k] + a * (values[lower + k + 1] - values[lower + k]);
        let c = (u + b * (l - u) - low) * gain;
        if (c !== c) continue;
        c = 3 * (c <= 0 ? 0 : c >= 255 ? 255 : Math.round(c));
        const f = f0[i], fa = fw[i];
        const vu = mask[veilUpper + f] + fa * (mask[veilUpper + f + 1] - mask[veilUpper + f]);
        const vl = mask[veilLower + f] + fa * (mask[veilLower + f + 1] - mask[veilLower + f]);
        const share = vu + fb * (vl - vu), faded = sight.veiled ? FADE * share : 0;
        const flag = share < 0.5 ? 0 : Math.max(flags[veilUpper + f], flags[veilUpper + f + 1], flags[veilLower + f], flags[veilLower + f + 1]);
        const x = Math.floor(i / sharp), y = Math.floor(row / sharp);
        if (flag === POORLY_COVERED ? (x + y) % 9 === 0 : flag === MESH_DEPENDENT && x % 7 === 0 && y % 7 === 0) {
          out[p] = HATCH[0]; out[p + 1] = HATCH[1]; out[p + 2] = HATCH[2];
        } else {
          for (let n = 0; n < 3; n++) out[p + n] = table[c + n] * (1 - faded) + PAPER[n] * faded;
        }
        out[p + 3] = 255;
      }
    }
    context.clearRect(0, 0, canvas.width, canvas.height);
    context.putImageData(image, Math.round(PAD.left * sharp), Math.round(PAD.top * sharp));
    const scale = context.createImageData(bar, h);
    for (let row = 0, p = 0; row < h; row++) {
      const c = 3 * Math.round(255 * (1 - (row + 0.5) / h));
      for (let i = 0; i < bar; i++, p += 4) {
        for (let n = 0; n < 3; n++) scale.data[p + n] = table[c + n];
        scale.data[p + 3] = 255;
      }
    }
    context.putImageData(scale, Math.round((width - PAD.right + 14) * sharp), Math.round(PAD.top * sharp));
    this.sight = sight;
    this.drawRays();
    this.overlay();
  }
  overlay() {
    const {host, ground, sight} = this, width = host.clientWidth, height = host.clientHeight;
    const right = width - PAD.right, bottom = height - PAD.bottom, parts = [];
    const add = (name, attributes, text) => parts.push(element(name, attributes, text));
    this.over.setAttribute('viewBox', `0 0 ${width} ${height}`);
    for (const v of ticks(...ground.distance, Math.max(2, this.wide / 75))) {
      add('path', {class: 'axis', d: `M${this.x(v)} ${bottom}v4`});
      add('text', {x: this.x(v), y: bottom + 16, 'text-anchor': 'middle'}, minus(String(v)));
    }
    for (const v of ticks(ground.elevation[1], ground.elevation[0], Math.max(2, this.high / 45))) {
      add('path', {class: 'axis', d: `M${PAD.left} ${this.y(v)}h-4`});
      add('text', {x: PAD.left - 7, y: this.y(v) + 4, 'text-anchor': 'end'}, minus(String(v)));
    }
    const [low, high] = sight.scale;
    for (const v of ticks(low, high, Math.max(2, this.high / 50))) {
      const y = bottom - (v - low) / (high - low) * this.high;
      add('path', {class: 'axis', d: `M${right + 26} ${y}h3`});
      add('text', {x: right + 32, y: y + 4}, (sight.signed && v > 0 ? '+' : '') + minus(String(v)));
    }
    add('text', {class: 'label', x: width - 2, y: 11, 'text-anchor': 'end'}, sight.label);
    add('rect', {class: 'box', x: PAD.left, y: PAD.top, width: this.wide, height: this.high});
    const times = ground.exaggeration > 1 ? `, heights \u00d7 ${ground.exaggeration}` : '';
    add('text', {class: 'label', x: (PAD.left + right) / 2, y: height - 5, 'text-anchor': 'middle'}, 'distance (m)' + times);
    add('text', {class: 'label', transform: `translate(12 ${(PAD.top + bottom) / 2}) rotate(-90)`, 'text-anchor': 'middle'}, 'elevation (m)');
    if (ground.surface) {
      const n = ground.surface.length - 1, d = ground.distance;
      const line = ground.surface.map((z, i) => `${this.x(d[0] + i / n * (d[1] - d[0])).toFixed(1)} ${Math.max(this.y(z), PAD.top).toFixed(1)}`);
      add('path', {class: 'surface', d: 'M' + line.join('L')});
    }
    if (this.shownPlaces) {
      parts.push(...this.signs(x => this.x(x)));
    }
    if (this.probe) {
      const [x, y] = this.nodeXY(this.probe);
      const d = `M${x} ${PAD.top}V${bottom}M${PAD.left} ${y}H${right}`;
      add('path', {class: 'cross-halo', d});
      add('path', {class: 'cross', d});
    }
    this.over.replaceChildren(...parts);
  }
  // Positions as in the figures: stars where sources stand, else triangles; stars on top.
  signs(across) {
    return [...this.places].sort((a, b) => a[2] - b[2]).map(([, where, star]) => {
      const sign = star ? 'm0 -5l1.5 3.4h3.7l-2.9 2.4 1 3.7-3.3-2.2-3.3 2.2 1-3.7-2.9-2.4h3.7z' : 'm0 2.5l-3.2 -5.5h6.4z';
      const d = where.map(place => `M${across(place[0]).toFixed(1)} ${this.y(place[place.length - 1]).toFixed(1)}${sign}`).join('');
      return element('path', {class: star ? 'place-star' : 'place-triangle', d});
    });
  }
  nodeXY([row, column]) {
    const {nz, nx} = this.ground;
    return [PAD.left + column / (nx - 1) * this.wide, PAD.top + row / (nz - 1) * this.high];
  }
}

// The same for a column: value against elevation, with an error band.
class Column extends Section {
  constructor(host, ground, places) { super(host, ground, places); this.canvas.remove(); }
  fit(width, height) {
    this.host.style.width = `${Math.min(width, 430)}px`;
    this.host.style.height = `${Math.round(height)}px`;
  }
  draw(sight) {
    this.wide = this.host.clientWidth - PAD.left - PAD.right + 60;
    this.high = this.host.clientHeight - PAD.top - PAD.bottom;
    if (this.high < 40) return;
    this.sight = sight;
    this.overlay();
  }
  node(event) {
    const box = this.host.getBoundingClientRect(), down = (event.clientY - box.top - PAD.top) / this.high;
    return down < 0 || down > 1 ? null : [Math.round(down * (this.ground.nz - 1)), 0];
  }
  // At least the sight's range, and all that the curves reach.
  range(sight) {
    const {field, chosen, band} = sight, curves = [...field.values, ...(chosen || [])];
    if (band) band.forEach((b, i) => curves.push(chosen[i] - b, chosen[i] + b));
    const known = curves.filter(Number.isFinite), [low, high] = sight.range;
    const least = Math.min(...known), most = Math.max(...known), room = 0.04 * (most - least);
    return [least < low ? least - room : low, most > high ? most + room : high];
  }
  nodeXY([row]) { return [PAD.left + this.wide / 2, PAD.top + row / (this.ground.nz - 1) * this.high]; }
  overlay() {
    const {host, ground, sight} = this, width = host.clientWidth, height = host.clientHeight;
    const bottom = height - PAD.bottom, right = PAD.left + this.wide, n = ground.nz - 1, parts = [];
    const add = (name, attributes, text) => parts.push(element(name, attributes, text));
    this.over.setAttribute('viewBox', `0 0 ${width} ${height}`);
    const [low, high] = this.range(sight);
    const x = v => PAD.left + (v - low) / (high - low) * this.wide, y = i => PAD.top + i / n * this.high;
    const under = Array.from({length: n + 1}, (_, i) => i).filter(i => !ground.surface || place([i, 0], ground)[1] <= ground.surface[0] + 1e-6);
    const half = this.high / n / 2;
    (sight.flags || []).forEach((flag, i) => {
      if (!flag || !under.includes(i)) return;
      const from = Math.max(y(i) - half, PAD.top);
      add('rect', {class: 'veil', x: PAD.left, y: from, width: this.wide, height: Math.min(y(i) + half, bottom) - from});
    });
    for (const v of ticks(low, high, 5)) {
      add('path', {class: 'grid', d: `M${x(v)} ${PAD.top}V${bottom}`});
      add('text', {x: x(v), y: bottom + 16, 'text-anchor': 'middle'}, minus(String(v)));
    }
    for (const v of ticks(ground.elevation[1], ground.elevation[0], this.high / 45)) {
      add('path', {class: 'grid', d: `M${PAD.left} ${this.y(v)}H${right}`});
      add('text', {x: PAD.left - 7, y: this.y(v) + 4, 'text-anchor': 'end'}, minus(String(v)));
    }
    const line = values => under.map(i => `${x(values[i]).toFixed(1)} ${y(i).toFixed(1)}`);
    if (sight.band) {
      const out = line(sight.band.map((b, i) => sight.chosen[i] + b)), back = line(sight.band.map((b, i) => sight.chosen[i] - b));
      add('path', {class: 'band', d: 'M' + out.concat(back.reverse()).join('L') + 'z'});
    }
    if (sight.chosen) add('path', {class: 'fitted', d: 'M' + line(sight.chosen).join('L')});
    add('path', {class: 'curve', d: 'M' + line(sight.field.values).join('L')});
    for (const [from, to, value] of sight.usual || []) if (value >= low && value <= high) add('path', {class: 'usual', d: `M${x(value)} ${this.y(from)}V${this.y(to)}`});
    add('path', {class: 'axis', d: `M${PAD.left} ${PAD.top}V${bottom}H${right}`});
    add('text', {class: 'label', x: (PAD.left + right) / 2, y: height - 5, 'text-anchor': 'middle'}, sight.label);
    add('text', {class: 'label', transform: `translate(12 ${(PAD.top + bottom) / 2}) rotate(-90)`, 'text-anchor': 'middle'}, 'elevation (m)');
    if (this.shownPlaces) parts.push(...this.signs(() => PAD.left));
    if (this.probe) {
      add('path', {class: 'cross', d: `M${PAD.left} ${y(this.probe[0])}H${right}`});
      add('circle', {class: 'now', r: 5, cx: x(sight.field.values[this.probe[0]]), cy: y(this.probe[0])});
    }
    this.over.replaceChildren(...parts);
  }
}

// Pointer and arrow keys move one probe over one or several pictures.
function probing(maps, hosts, move, start) {
  hosts.forEach((host, i) => {
    host.addEventListener('pointermove', event => { const node = maps[i].node(event); if (node) move(node); });
    host.addEventListener('pointerdown', event => { const node = maps[i].node(event); if (node) move(node); });
    host.addEventListener('keydown', event => {
      const way = {ArrowLeft: [0, -1], ArrowRight: [0, 1], ArrowUp: [-1, 0], ArrowDown: [1, 0]}[event.key];
      if (!way || event.ctrlKey || event.altKey || event.metaKey) return;
      event.preventDefault();
      const at = start(), step = event.shiftKey ? 10 : 1, {nz, nx} = maps[i].ground;
      move([Math.max(0, Math.min(nz - 1, at[0] + way[0] * step)), Math.max(0, Math.min(nx - 1, at[1] + way[1] * step))]);
    });
  });
}

// Words for screen readers come when the probe rests, not at every step.
function telling(status) {
  let timer = 0;
  return text => { clearTimeout(timer); timer = setTimeout(() => { status.textContent = text; }, 500); };
}

function place([row, column], ground) {
  const e = ground.elevation, elevation = e[0] + row / (ground.nz - 1) * (e[1] - e[0]);
  if (!ground.distance) return [null, elevation];
  return [ground.distance[0] + column / (ground.nx - 1) * (ground.distance[1] - ground.distance[0]), elevation];
}

const placeText = ([distance, elevation]) => (distance === null ? '' : `distance ${digits(distance)} m, `) + `elevation ${digits(elevation, 5)} m`;

const readable = article => JSON.parse(article.querySelector('script.live').textContent);

async function stacksOf(article, about) {
  const found = {};
  for (const held of article.querySelectorAll('script[data-stack]')) {
    const name = held.dataset.stack;
    found[name] = new Stack(await unpack(held.textContent, about[name]), about[name]);
  }
  return found;
}

class Live {
  constructor(article, about, stacks) {
    Object.assign(this, {article, about, stacks, now: 0, back: null, timer: 0, mode: 'value', cache: new Map()});
    this.part = name => article.querySelector(`[data-part="${name}"]`);
    this.rules = about.rules;
    this.chosen = this.rules.find(rule => rule.name === about.chosen) || this.rules[0];
    const Kind = about.column ? Column : Section;
    this.map = new Kind(this.part('map'), about.frame, about.places, article.querySelector('.static .rays'));
    this.flags = Float32Array.from(stacks.quality.field(0).values, Math.round);
    this.coverage = about.companions.length ? stacks.quality.field(1).values : null;
    const {nz, nx} = about.frame;
    this.probe = [Math.round((nz - 1) * 0.45), Math.round((nx - 1) / 2)];
    this.veilNow();
    this.wire();
    this.show(this.chosen.frame);
  }
  frame(k) {
    if (!this.cache.has(k)) {
      if (this.cache.size > 12) this.cache.clear();
      const [stack, index] = this.about.frames[k];
      this.cache.set(k, this.stacks[stack].field(index));
    }
    return this.cache.get(k);
  }
  valueAt(k, [row, column]) {
    const [stack, index] = this.about.frames[k], {nz, nx} = this.about.frame;
    return this.stacks[stack].at(index, row / Math.max(nz - 1, 1), nx > 1 ? column / (nx - 1) : 0);
  }
  onFullGrid(k) {
    const {nz, nx} = this.about.frame, field = this.frame(k);
    if (field.nz === nz && field.nx === nx) return field.values;
    const values = new Float32Array(nz * nx);
    for (let row = 0, n = 0; row < nz; row++) for (let column = 0; column < nx; column++, n++) values[n] = this.valueAt(k, [row, column]);
    return values;
  }
  spreadField() {
    if (!this.spread) {
      const firm = this.rules.filter(rule => rule.firm && rule.stops);
      this.spreadOf = firm.length > 1 ? firm : this.rules;
      const fields = [...new Set(this.spreadOf.map(rule => rule.frame))].map(k => this.frame(k).values);
      this.spread = Float32Array.from(fields[0], (_, n) => {
        let low = Infinity, high = -Infinity;
        for (const field of fields) { low = Math.min(low, field[n]); high = Math.max(high, field[n]); }
        return high - low;
      });
    }
    return this.spread;
  }
  veilNow() {
    const slider = this.part('threshold');
    const most = this.coverage ? this.stacks.quality.about.high[1] : 0;
    const under = slider ? most * (slider.value / 100) ** 2 : 0;
    if (slider) this.part('under').textContent = withUnit(digits(under, 2), this.about.companions[0][2]);
    this.marked = this.flags.map((flag, n) => flag || (under > 0 && this.coverage[n] < under ? POORLY_COVERED : 0));
  }
  sight() {
    const {frame, property, scale, change, spread} = this.about, unit = property.units;
    const common = {flags: this.marked, veiled: this.part('veiled').checked};
    if (this.mode === 'spread') {
      const values = this.spreadField();
      return {...common, field: {values, nz: frame.nz, nx: frame.nx}, scale: [0, spread], range: [0, spread * 1.1], table: tables.field, label: labelled('spread', unit)};
    }
    if (this.mode === 'value') {
      const sight = {...common, field: this.frame(this.now), scale, range: this.about.ends, table: tables.field, label: labelled(property.name, unit)};
      if (this.about.column) {
        sight.chosen = this.frame(this.chosen.frame).values;
        sight.usual = this.about.usual;
        if (this.about.band !== null) sight.band = this.stacks.quality.field(this.about.band + 1).values;
      }
      return sight;
    }
    const base = this.onFullGrid(this.rules[+this.mode].frame), now = this.onFullGrid(this.now);
    const values = now.map((v, n) => v - base[n]);
    return {...common, field: {values, nz: frame.nz, nx: frame.nx}, scale: [-change, change], range: [-change, change], table: tables.change, label: labelled('difference', unit), signed: true};
  }
  here() { return this.rules.filter(rule => rule.frame === this.now); }
  show(k) {
    this.now = Math.max(0, Math.min(this.about.frames.length - 1, k));
    const here = this.here(), at = digits(this.about.iterations[this.now], 3), slider = this.part('slider');
    const names = here.map(rule => rule.name + (rule === this.chosen ? ' (chosen)' : '') + (rule.stops ? '' : ': no stop'));
    slider.value = this.now;
    slider.setAttribute('aria-valuetext', `iteration ${at}` + (names.length ? `, picked by ${names.join(', ')}` : ''));
    this.part('iteration').textContent = `iteration ${at}`;
    this.part('title').textContent = `\u00b7 iteration ${at} \u00b7 ` + (names.length ? names.join(', ') : 'no rule stops here');
    for (const marked of this.article.querySelectorAll('[data-rule]')) {
      const on = here.some(rule => rule.symbol === marked.dataset.rule);
      marked.classList.toggle('on', on);
      if (marked.tagName === 'BUTTON') marked.setAttribute('aria-pressed', String(on));
    }
    this.follow();
    this.redraw();
  }
  redraw() { this.map.probe = this.probe; this.map.draw(this.sight()); this.tell(); this.trace(); }
  // The mark on each curve, between whole iterations where the pick is.
  follow() {
    const at = this.about.iterations[this.now];
    for (const chart of this.article.querySelectorAll('.curve-chart')) {
      const points = this.points(chart), i = Math.min(Math.floor(at), points.length - 1), j = Math.min(i + 1, points.length - 1);
      const a = points[i] || points[j], b = points[j] || a, mark = chart.querySelector('.now');
      if (!a) continue;
      mark.setAttribute('cx', a[0] + (at - i) * (b[0] - a[0]));
      mark.setAttribute('cy', a[1] + (at - i) * (b[1] - a[1]));
    }
  }
  points(chart) {
    if (!chart.points) chart.points = chart.dataset.points.split(' ').map(p => p === '-' ? null : p.split(',').map(Number));
    return chart.points;
  }
  above() {
    const {surface} = this.about.frame;
    return Boolean(surface) && place(this.probe, this.about.frame)[1] > surface[this.probe[1]] + 1e-6;
  }
  tell() {
    const {property, companions, meanings, frame} = this.about, n = this.probe[0] * frame.nx + this.probe[1];
    const where = placeText(place(this.probe, frame));
    const readout = this.part('readout'), value = document.createElement('b');
    let told = 'above the surface', rest = '';
    if (!this.above()) {
      const [stack, index] = this.about.frames[this.now], exact = stack === 'picks';
      told = withUnit(digits(this.valueAt(this.now, this.probe), exact ? 5 : 4), property.units);
      if (!exact) rest += ` (\u00b1 ${digits(this.stacks[stack].step(index) / 2, 1)}, display rounding)`;
      if (this.mode === 'spread') rest += `, spread between ${this.spreadOf.length} picks ${digits(this.spreadField()[n], 3)}`;
      else if (this.mode !== 'value') rest += `, difference from ${this.rules[+this.mode].name} ${digits(this.valueAt(this.now, this.probe) - this.valueAt(this.rules[+this.mode].frame, this.probe), 3)}`;
      companions.forEach(([name, , units], i) => {
        const said = {noise_part: 'noise part', total_error: 'total error', resolved_fraction: 'comes back'};
        const key = Object.keys(said).find(end => name.endsWith(end));
        if (key || i === 0) rest += `; ${key ? said[key] : companions[0][1]} ${withUnit(digits(this.stacks.quality.at(i + 1, this.probe[0] / Math.max(frame.nz - 1, 1), frame.nx > 1 ? this.probe[1] / (frame.nx - 1) : 0), 2), units)}`;
      });
      rest += `; ${meanings[this.flags[n]] || 'unknown'}`;
    }
    value.textContent = told;
    readout.replaceChildren(`${where}: `, value, rest);
    (this.say = this.say || telling(this.part('status')))(`${where}: ${told}${rest}`);
  }
  trace() {
    const chart = this.part('trace'), width = chart.clientWidth, height = chart.clientHeight;
    if (width < 100) return;
    const {iterations, frames} = this.about, left = 54, right = 12, values = frames.map((_, k) => this.valueAt(k, this.probe));
    const parts = [], add = (name, attributes, text) => parts.push(element(name, attributes, text));
    chart.setAttribute('viewBox', `0 0 ${width} ${height}`);
    if (this.above()) {
      chart.replaceChildren(element('text', {x: left, y: 30}, 'The probe is above the surface.'));
      return;
    }
    let low = Math.min(...values), high = Math.max(...values);
    const room = 0.1 * (high - low) || 0.5 * Math.abs(high) || 1, end = Math.log1p(Math.max(iterations[iterations.length - 1], 1));
    low -= room; high += room;
    const x = k => left + Math.log1p(k) / end * (width - left - right), y = v => height - 34 - (v - low) / (high - low) * (height - 46);
    for (const v of ticks(low, high, Math.max(2, height / 45))) {
      add('path', {class: 'grid', d: `M${left} ${y(v)}H${width - right}`});
      add('text', {x: left - 6, y: y(v) + 4, 'text-anchor': 'end'}, minus(String(v)));
    }
    for (const k of TICKS.filter(k => k <= iterations[iterations.length - 1])) add('text', {x: x(k), y: height - 19, 'text-anchor': 'middle'}, String(k));
    add('text', {class: 'label', x: (left + width - right) / 2, y: height - 4, 'text-anchor': 'middle'}, 'iteration');
    add('path', {class: 'axis', d: `M${left} 8V${height - 34}H${width - right}`});
    add('path', {class: 'curve', d: 'M' + values.map((v, k) => `${x(iterations[k]).toFixed(1)} ${y(v).toFixed(1)}`).join('L')});
    for (const rule of this.rules) {
      const k = rule.frame;
      add('use', {href: `#${rule.symbol}`, x: x(iterations[k]) - 7, y: y(values[k]) - 7, width: 14, height: 14, 'data-rule': rule.symbol, class: 'badge' + (k === this.now ? ' on' : '')});
    }
    add('path', {class: 'limit', d: `M${x(iterations[this.now])} 8V${height - 34}`});
    add('circle', {class: 'now', r: 5, cx: x(iterations[this.now]), cy: y(values[this.now])});
    chart.replaceChildren(...parts);
  }
  // Badges over the slider, moved apart where picks are close.
  marks() {
    const holder = this.part('marks'), width = holder.clientWidth, thumb = 16, gap = 18, last = Math.max(this.about.frames.length - 1, 1);
    if (width < 100) return;
    const sorted = [...this.rules].sort((a, b) => a.frame - b.frame);
    const at = sorted.map(rule => thumb / 2 + rule.frame / last * (width - thumb)), to = [];
    at.forEach((x, i) => to.push(Math.max(x, i ? to[i - 1] + gap : gap / 2)));
    for (let i = to.length - 1, most = width - gap / 2; i >= 0; i--, most = to[i + 1] - gap) to[i] = Math.min(to[i], most);
    holder.setAttribute('viewBox', `0 0 ${width} 26`);
    holder.replaceChildren(...sorted.map((_, i) => element('path', {class: 'lead-ink', d: `M${to[i]} 16L${at[i]} 26`})), ...sorted.map((rule, i) => element('use', {
      href: `#${rule.symbol}`, x: to[i] - 8.5, y: 1, width: 17, height: 17, class: 'badge' + (rule.frame === this.now ? ' on' : ''), 'data-rule': rule.symbol,
    })));
  }
  layout() {
    const viewer = this.part('viewer'), tall = viewer.classList.contains('tall'), width = viewer.clientWidth;
    if (width < 200) return;
    const beside = tall && width > 640;
    viewer.classList.toggle('stacked', !beside);
    this.map.fit(beside ? width * 0.58 : width, Math.max(300, Math.min(560, window.innerHeight - 250)));
    this.redraw();
    this.marks();
  }
  stop() {
    if (!this.timer) return;
    clearInterval(this.timer);
    this.timer = 0;
    this.part('play').textContent = 'Play';
    this.part('play').setAttribute('aria-pressed', 'false');
  }
  pin(k) { this.stop(); this.back = null; this.show(k); }
  wire() {
    const {article, part} = {article: this.article, part: this.part};
    let asked = 0;
    part('slider').addEventListener('input', event => {
      this.stop();
      this.back = null;
      const k = +event.target.value;
      if (!asked) requestAnimationFrame(() => { const last = asked - 1; asked = 0; this.show(last); });
      asked = k + 1;
    });
    part('play').addEventListener('click', () => {
      if (this.timer) return this.stop();
      part('play').textContent = 'Pause';
      part('play').setAttribute('aria-pressed', 'true');
      if (this.now >= this.about.frames.length - 1) this.show(0);
      this.timer = setInterval(() => this.now >= this.about.frames.length - 1 ? this.stop() : this.show(this.now + 1), 150);
    });
    part('mode').addEventListener('change', event => { this.mode = event.target.value; this.redraw(); });
    const veil = () => { this.veilNow(); this.redraw(); };
    part('veiled').addEventListener('change', veil);
    if (part('threshold')) part('threshold').addEventListener('input', veil);
    if (part('places')) part('places').addEventListener('change', event => { this.map.shownPlaces = event.target.checked; this.map.overlay(); });
    if (part('rays')) part('rays').addEventListener('change', event => { this.map.shownRays = event.target.checked; this.map.drawRays(); });
    const frameOf = marked => { const rule = this.rules.find(one => one.symbol === marked.dataset.rule); return rule ? rule.frame : null; };
    article.addEventListener('click', event => {
      const marked = event.target.closest('[data-rule]');
      if (marked && frameOf(marked) !== null) return this.pin(frameOf(marked));
      const chart = event.target.closest('.curve-chart');
      if (chart) this.pin(this.nearest(chart, event));
    });
    for (const row of article.querySelectorAll('tr[data-rule]')) {
      row.addEventListener('mouseenter', () => {
        if (this.timer || frameOf(row) === null) return;
        if (this.back === null) this.back = this.now;
        this.show(frameOf(row));
      });
      row.addEventListener('mouseleave', event => {
        if (this.back === null || (event.relatedTarget && event.relatedTarget.closest && event.relatedTarget.closest('tr[data-rule]'))) return;
        const back = this.back;
        this.back = null;
        this.show(back);
      });
    }
    probing([this.map], [part('map')], node => { this.probe = node; this.map.probe = node; this.map.overlay(); this.tell(); this.trace(); }, () => this.probe);
    new ResizeObserver(() => this.layout()).observe(article.querySelector('.ground'));
  }
  nearest(chart, event) {
    const at = new DOMPoint(event.clientX, event.clientY).matrixTransform(chart.getScreenCTM().inverse());
    let best = 0, least = Infinity;
    this.points(chart).forEach((p, i) => {
      const far = p ? Math.hypot(p[0] - at.x, p[1] - at.y) : Infinity;
      if (far < least) { least = far; best = i; }
    });
    const {iterations} = this.about;
    return iterations.reduce((near, k, i) => Math.abs(k - best) < Math.abs(iterations[near] - best) ? i : near, 0);
  }
  state() {
    return {frame: this.now, iteration: this.about.iterations[this.now], mode: this.mode, probe: this.probe, value: this.above() ? null : this.valueAt(this.now, this.probe), box: [this.map.wide, this.map.high, PAD.left, PAD.top]};
  }
}

// Two results on one grid: pictures of both and of their difference under one probe.
class Pair {
  constructor(article, about, stacks) {
    Object.assign(this, {article, about, stacks});
    const {frame, scale, change} = about, hosts = [...article.querySelectorAll('[data-part="map"]')];
    const Kind = about.column ? Column : Section;
    this.maps = hosts.map(host => new Kind(host, frame, []));
    const room = 0.25 * (scale[1] - scale[0]), unit = about.property.units;
    this.sights = [0, 1, 2].map(i => ({
      field: stacks.pair.field(i), veiled: true, table: i < 2 ? tables.field : tables.change, signed: i === 2,
      scale: i < 2 ? scale : [-change, change], range: i < 2 ? [scale[0] - room, scale[1] + room] : [-change, change],
      label: labelled(i < 2 ? about.property.name : 'difference', unit),
    }));
    const flags = Float32Array.from(stacks.flags.field(0).values, Math.round);
    for (const sight of this.sights) sight.flags = flags;
    this.probe = [frame.nz >> 1, frame.nx >> 1];
    this.say = telling(article.querySelector('[data-part="status"]'));
    probing(this.maps, hosts, node => this.move(node), () => this.probe);
    new ResizeObserver(() => this.layout()).observe(article.querySelector('.trio'));
    this.layout();
  }
  layout() {
    const width = this.article.querySelector('.trio').clientWidth;
    if (width < 200) return;
    const {distance: d, elevation: e, exaggeration} = this.about.frame;
    const flat = d && (d[1] - d[0]) > 1.6 * (e[0] - e[1]) * exaggeration;
    this.article.querySelector('.trio').classList.toggle('stacked', Boolean(flat));
    this.maps.forEach((map, i) => { map.fit(flat ? width : width / 3 - 10, 460); map.draw(this.sights[i]); });
    this.move(this.probe);
  }
  value(i) { const {nz, nx} = this.about.frame; return this.stacks.pair.at(i, this.probe[0] / Math.max(nz - 1, 1), nx > 1 ? this.probe[1] / (nx - 1) : 0); }
  move(node) {
    this.probe = node;
    for (const map of this.maps) { map.probe = node; if (map.sight) map.overlay(); }
    const {property, frame, names} = this.about, s = frame.surface;
    const where = placeText(place(node, frame)), above = s && place(node, frame)[1] > s[node[1]] + 1e-6;
    const text = above ? `${where}: above the surface` : `${where}: ${names[0]} ${digits(this.value(0), 5)}, ${names[1]} ${digits(this.value(1), 5)}, difference ${withUnit(digits(this.value(2), 3), property.units)}`;
    this.article.querySelector('[data-part="readout"]').textContent = text;
    this.say(text);
  }
  state() { return {probe: this.probe, values: [0, 1, 2].map(i => this.value(i))}; }
}

async function main() {
  page.classList.add('scripted');
  for (const [name, text] of Object.entries(JSON.parse(document.getElementById('colour-tables').textContent))) tables[name] = bytes(text);
  const articles = [...document.querySelectorAll('article.profile')], living = new Map();
  const choose = document.getElementById('choose');
  const open = async article => {
    for (const other of articles) other.hidden = other !== article;
    if (!living.has(article)) {
      const about = readable(article), stacks = await stacksOf(article, about.stacks);
      const Kind = about.names ? Pair : Live, one = new Kind(article, about, stacks);
      living.set(article, one);
    }
    if (living.get(article).layout) living.get(article).layout();
    window.report = living.get(article);
  };
  await open(articles[0]);
  const fall = error => {
    // The page without a script is whole: fall back on it.
    page.classList.remove('scripted');
    for (const article of articles) article.hidden = false;
    page.dataset.ready = 'failed';
    console.error(error);
  };
  if (choose) choose.addEventListener('change', () => open(document.getElementById(choose.value)).catch(fall));
  performance.mark('ready');
  page.dataset.ready = 'yes';
}

main().catch(error => {
  page.classList.remove('scripted');
  for (const article of document.querySelectorAll('article.profile')) article.hidden = false;
  page.dataset.ready = 'failed';
  console.error(error);
});
})();
