/* The page's own script: it evaluates the plan's polynomials where they are looked at, and keeps
   timeline, curves and views at one time. BokehJS does the drawing. */
"use strict";

const plan = JSON.parse(document.getElementById("plan-data").textContent);
const QUANTITIES = ["position", "velocity", "acceleration", "jerk"];
/* Share of a limit below which a curve would be flat if it were scaled to it. */
const FLAT = 0.01;
/* What moves with the time is drawn on a layer of its own: the rest need not be drawn again. */
const OVER = { level: "overlay" };
const AT_ONCE = 3;
const LEAST = Math.min(1e-4, plan.duration / 1000 || 1);
const calm = matchMedia("(prefers-reduced-motion: reduce)");
const coarse = matchMedia("(pointer: coarse)").matches;
const $ = (id) => document.getElementById(id);
const css = (name) => getComputedStyle(document.documentElement).getPropertyValue(name).trim();
const clamp = (value, low, high) => Math.min(Math.max(value, low), high);
const between = (one, other, share) => one + share * (other - one);

function numbers(text, Kind) {
  const bytes = Uint8Array.from(atob(text), (sign) => sign.charCodeAt(0));
  return new Kind(bytes.buffer);
}

/* Index of the last entry that is not greater than a value. */
function before(sorted, value) {
  let low = 0, high = sorted.length - 1;
  while (low < high) {
    const middle = (low + high + 1) >> 1;
    if (sorted[middle] <= value) low = middle; else high = middle - 1;
  }
  return low;
}

/* Keeps the least and the greatest point of every column of the screen. */
function thinned(t, y, from, to, columns) {
  if (t.length <= 4 * columns) return { t, y };
  const low = new Float64Array(columns).fill(Infinity), high = new Float64Array(columns).fill(-Infinity);
  const tLow = new Float64Array(columns), tHigh = new Float64Array(columns);
  for (let i = 0; i < t.length; i++) {
    const column = clamp(Math.floor((t[i] - from) / (to - from) * columns), 0, columns - 1);
    if (y[i] < low[column]) { low[column] = y[i]; tLow[column] = t[i]; }
    if (y[i] > high[column]) { high[column] = y[i]; tHigh[column] = t[i]; }
  }
  const ts = [], ys = [];
  for (let c = 0; c < columns; c++) {
    if (low[c] === Infinity) continue;
    const pair = [[tLow[c], low[c]], [tHigh[c], high[c]]].sort((one, other) => one[0] - other[0]);
    for (const [when, value] of pair) { ts.push(when); ys.push(value); }
  }
  return { t: ts, y: ys };
}

/* A motion as polynomials: exact wherever it is looked at. */
class Exact {
  constructor(packed, axes) {
    this.breaks = numbers(packed.breaks, Float64Array);
    this.own = numbers(packed.coefficients, Float64Array);
    this.powers = packed.powers;
    this.axes = axes;
  }
  inside(piece, axis, order, since) {
    let value = 0;
    for (let power = this.powers - 1; power >= order; power--) {
      let factor = 1;
      for (let k = 0; k < order; k++) factor *= power - k;
      value = value * since + factor * this.own[(piece * this.powers + power) * this.axes + axis];
    }
    return value;
  }
  at(axis, order, time) {
    const piece = Math.min(before(this.breaks, time), this.breaks.length - 2);
    return this.inside(piece, axis, order, time - this.breaks[piece]);
  }
  ends(axis, order, time) {
    const value = this.at(axis, order, time);
    return [value, value];
  }
  curve(axis, order, from, to, columns) {
    const first = Math.min(before(this.breaks, from), this.breaks.length - 2);
    const last = Math.min(before(this.breaks, to), this.breaks.length - 2);
    const straight = this.powers - 1 - order <= 1;
    const t = [], y = [];
    for (let piece = first; piece <= last; piece++) {
      const start = Math.max(this.breaks[piece], from), end = Math.min(this.breaks[piece + 1], to);
      const count = straight ? 1 : clamp(Math.ceil((end - start) / (to - from) * columns), 4, 2 * columns);
      for (let k = 0; k <= count; k++) {
        const time = start + (end - start) * k / count;
        t.push(time);
        y.push(this.inside(piece, axis, order, time - this.breaks[piece]));
      }
    }
    return thinned(t, y, from, to, columns);
  }
}

/* A long motion as the least and the greatest values of stretches of time. */
class Stretches {
  constructor(packed, axes) {
    this.times = numbers(packed.times, Float64Array);
    this.low = numbers(packed.low, Float32Array);
    this.high = numbers(packed.high, Float32Array);
    this.axes = axes;
  }
  ends(axis, order, time) {
    const stretch = Math.min(before(this.times, time), this.times.length - 2);
    const index = (stretch * 4 + order) * this.axes + axis;
    return [this.low[index], this.high[index]];
  }
  curve(axis, order, from, to, columns) {
    const t = [], y = [];
    const last = Math.min(before(this.times, to), this.times.length - 2);
    for (let k = before(this.times, from); k <= last; k++) {
      const index = (k * 4 + order) * this.axes + axis;
      const third = (this.times[k + 1] - this.times[k]) / 3;
      t.push(this.times[k] + third, this.times[k] + 2 * third);
      y.push(this.low[index], this.high[index]);
    }
    return thinned(t, y, from, to, columns);
  }
}

/* A curve of samples, such as a torque. */
class Samples {
  constructor(packed) {
    this.t = numbers(packed.times, Float64Array);
    this.y = numbers(packed.values, Float32Array);
  }
  at(time) {
    const index = before(this.t, time), next = Math.min(index + 1, this.t.length - 1);
    const span = this.t[next] - this.t[index];
    const share = span > 0 ? clamp((time - this.t[index]) / span, 0, 1) : 0;
    return between(this.y[index], this.y[next], share);
  }
  curve(from, to, columns) {
    const first = before(this.t, from), last = Math.min(before(this.t, to) + 2, this.t.length);
    return thinned(this.t.subarray(first, last), this.y.subarray(first, last), from, to, columns);
  }
}

const motion = plan.motion.breaks
  ? new Exact(plan.motion, plan.axes.length) : new Stretches(plan.motion, plan.axes.length);
const loads = plan.loads.map((own) => ({ ...own, samples: new Samples(own) }));
const state = { now: 0, playing: false, mark: null, magnified: 1, toLimits: true, from: 0, to: plan.duration };
let figures = [], spaces = [];

/* ---- curves ---- */

function rows(axis) {
  const own = plan.axes[axis], { velocity, acceleration, deceleration, jerk } = own.limits;
  const greatest = Math.max(acceleration, deceleration);
  const highs = [own.travel[1], velocity, greatest, jerk];
  const lows = [own.travel[0], -velocity, -greatest, jerk === null ? null : -jerk];
  const stands = plan.standing * peak((from, to, columns) => motion.curve(axis, 1, from, to, columns));
  const found = QUANTITIES.map((name, order) => ({
    name, unit: own.unit + ["", "/s", "/s²", "/s³"][order], low: lows[order], high: highs[order],
    ends: (when) => motion.ends(axis, order, when),
    curve: (from, to, columns) => motion.curve(axis, order, from, to, columns),
    // An end of the travel is a place like any other: reaching it is no sign of haste.
    marked: order > 0,
    bounds: order !== 2 || acceleration === deceleration ? null
      : (when) => bounds(own.limits, motion.ends(axis, 1, when), stands),
  }));
  for (const load of loads.filter((entry) => entry.axis === axis)) {
    found.push({
      name: load.name, unit: load.unit, low: load.limit === null ? null : -load.limit, high: load.limit,
      ends: (when) => { const value = load.samples.at(when); return [value, value]; },
      curve: (from, to, columns) => load.samples.curve(from, to, columns), marked: true, bounds: null,
    });
  }
  for (const row of found) row.peak = peak(row.curve);
  return found;
}

/* The greatest magnitude of a curve in the whole cycle. */
function peak(curve) {
  return curve(0, plan.duration || 1, 2000).y.reduce((most, value) => Math.max(most, Math.abs(value)), 0);
}

/* What bounds an acceleration at a velocity: another limit where the axis slows down. */
function bounds({ acceleration, deceleration }, [slowest, fastest], stands) {
  const onward = fastest > stands, back = slowest < -stands, both = Math.max(acceleration, deceleration);
  if (onward && back) return [-both, both];
  return [onward ? -deceleration : -acceleration, back ? deceleration : acceleration];
}

function reached(row, value, when) {
  const [low, high] = row.bounds ? row.bounds(when) : [row.low, row.high];
  return row.marked && high !== null && (value >= plan.at_limit * high || value <= plan.at_limit * low);
}

function formatter() { return new Bokeh.BasicTickFormatter({ power_limit_high: 7, power_limit_low: -5 }); }

function plain(options) {
  const figure = Bokeh.Plotting.figure({
    toolbar_location: null, tools: [], output_backend: "canvas",
    background_fill_color: css("--paper"), border_fill_color: css("--paper"),
    outline_line_color: css("--rule"), min_border: 4, ...options,
  });
  for (const axis of [figure.xaxis, figure.yaxis].flat()) {
    axis.axis_line_color = css("--rule");
    axis.major_tick_line_color = css("--rule");
    axis.minor_tick_line_color = null;
    axis.major_label_text_color = css("--ink");
    axis.major_label_text_font_size = "11px";
    axis.axis_label_text_color = css("--ink");
    axis.axis_label_text_font_size = "11px";
    axis.axis_label_text_font_style = "normal";
    axis.formatter = formatter();
  }
  for (const grid of [figure.xgrid, figure.ygrid].flat()) grid.grid_line_color = css("--grid");
  return figure;
}

/* A finger scrolls the page; a mouse shifts a figure, and zooms with Ctrl. */
function gestures(figure, options) {
  if (coarse) return;
  const pan = new Bokeh.PanTool(options), wheel = new Bokeh.WheelZoomTool({ ...options, modifiers: { ctrl: true } });
  figure.add_tools(pan, wheel);
  figure.toolbar.active_drag = pan;
  figure.toolbar.active_scroll = wheel;
}

function curveFigure(axis, row, width, last) {
  const figure = plain({
    width, height: last ? 148 : 118,
    x_range: new Bokeh.Range1d({ start: state.from, end: state.to || 1, bounds: [0, plan.duration || 1], min_interval: LEAST }),
    y_range: new Bokeh.Range1d({ start: 0, end: 1 }), min_border_left: 72, min_border_right: 12,
    title: new Bokeh.Title({
      text_font_size: "12px",
      text_font_style: "normal", text_color: css("--ink"),
    }),
  });
  figure.xaxis.visible = last;
  if (last) figure.xaxis.axis_label = "time, s";
  figure.yaxis.ticker = new Bokeh.BasicTicker({ desired_num_ticks: 4 });
  figure.xaxis.ticker = new Bokeh.BasicTicker({ desired_num_ticks: 6 });
  const scale = figure.yaxis.formatter = formatter();
  const forbidden = { fill_color: css("--beyond"), fill_alpha: 0.10, hatch_pattern: "/", hatch_color: css("--beyond"), hatch_alpha: 0.35, hatch_weight: 0.6, hatch_scale: 8, level: "underlay" };
  const line = { line_color: css("--beyond"), line_width: 1, line_dash: [5, 3] };
  const moving = new Bokeh.ColumnDataSource({ data: { t: [], low: [], high: [], floor: [], sky: [] } });
  if (row.bounds) {
    for (const [limit, beyond] of [["low", "floor"], ["high", "sky"]]) {
      figure.varea({ field: "t" }, { field: limit }, { field: beyond }, { source: moving, ...forbidden });
      figure.line({ field: "t" }, { field: limit }, { source: moving, ...line, line_dash: "dashed" });
    }
  }
  for (const [side, limit] of [["bottom", row.high], ["top", row.low]]) {
    if (limit === null || row.bounds) continue;
    figure.add_layout(new Bokeh.BoxAnnotation({ [side]: limit, ...forbidden }));
    figure.add_layout(new Bokeh.Span({ location: limit, dimension: "width", ...line }));
  }
  const mark = new Bokeh.BoxAnnotation({ left: 0, right: 0, fill_color: css("--accent"), fill_alpha: 0.13, visible: false, level: "underlay" });
  const now = new Bokeh.Span({ location: state.now, dimension: "height", line_color: css("--accent"), line_width: 1.5, ...OVER });
  figure.add_layout(mark);
  const source = new Bokeh.ColumnDataSource({ data: { t: [], y: [] } });
  const limit = new Bokeh.ColumnDataSource({ data: { t: [], y: [] } });
  figure.line({ field: "t" }, { field: "y" }, { source, line_color: css("--ink"), line_width: 1.4 });
  figure.line({ field: "t" }, { field: "y" }, { source: limit, line_color: css("--limit"), line_width: 4, line_alpha: 0.75 });
  figure.add_layout(now);
  gestures(figure, { dimensions: "width" });
  const moved = () => setRange(figure.x_range.start, figure.x_range.end);
  figure.x_range.properties.start.change.connect(moved);
  figure.x_range.properties.end.change.connect(moved);
  figure.on_event("mousemove", (event) => { if (!state.playing) setNow(event.x); });
  figure.on_event("tap", (event) => setNow(event.x));
  return { figure, row, axis, source, limit, scale, moving, mark, now, columns: Math.max(width - 80, 100) };
}

function refresh(own) {
  const { row, figure } = own;
  const { t, y } = row.curve(state.from, state.to, own.columns);
  own.source.data = { t, y };
  own.limit.data = atLimit(row, t, y, (state.to - state.from) / own.columns / 2);
  if (row.bounds) own.moving.data = bandsOf(row, own.columns);
  let low = Infinity, high = -Infinity;
  for (const value of y) { low = Math.min(low, value); high = Math.max(high, value); }
  const far = row.marked && row.peak > 0 && row.peak < FLAT * row.high;
  if (state.toLimits && row.low !== null && !far) { low = Math.min(low, row.low); high = Math.max(high, row.high); }
  figure.title.text = `${plan.axes[own.axis].name} ${row.name}, ${row.unit}${far ? ` (limit ${digits(row.high)})` : ""}`;
  const room = 0.08 * (high - low) || Math.max(Math.abs(high), 1) * 0.1;
  figure.y_range.setv({ start: low - room, end: high + room });
  // Few digits of a power of ten keep the scale as narrow as the others'.
  own.scale.precision = Math.max(-low, high) >= 1e7 ? 1 : "auto";
}

/* The stretches of a curve that are at a limit; an instant is drawn as wide as can be seen. */
function atLimit(row, t, y, half) {
  const marked = { t: [], y: [] };
  const add = (...points) => { for (const [when, value] of points) { marked.t.push(when); marked.y.push(value); } };
  for (let i = 0; i < t.length; i++) {
    if (!reached(row, y[i], t[i])) continue;
    add([t[i] - half, y[i]], [t[i] + half, y[i]]);
    const middle = (t[i] + t[i + 1]) / 2;
    // Of a crowded curve the next point may be at the other limit.
    if (y[i] * y[i + 1] > 0 && row.ends(middle).some((value) => reached(row, value, middle)) && reached(row, y[i + 1], middle)) {
      add([t[i + 1], y[i + 1]]);
    }
    add([NaN, NaN]);
  }
  return marked;
}

/* Bounds that change with the velocity, column by column of the screen. */
function bandsOf(row, columns) {
  const found = { t: [], low: [], high: [], floor: [], sky: [] }, far = 4 * row.high;
  const wide = (state.to - state.from) / columns;
  for (let k = 0; k < columns; k++) {
    const start = state.from + k * wide, [low, high] = row.bounds(start + wide / 2);
    found.t.push(start, start + wide);
    found.low.push(low, low); found.high.push(high, high);
    found.floor.push(-far, -far); found.sky.push(far, far);
  }
  return found;
}

/* ---- views in space ---- */

const across = plan.columns[0], along = plan.columns[1], height = plan.columns[2];

const track = plan.sides.length ? {
  ...plan.track, times: numbers(plan.track.times, Float64Array), classes: numbers(plan.track.classes, Uint8Array),
  feet: plan.track.feet && placed(plan.track.feet, 2),
} : null;
if (track) track.points = track.points ? placed(track.points, 3) : Float64Array.from([...track.times].flatMap(exactly));

/* Points that are counted from the lowest corner of what is seen. */
function placed(text, columns) {
  return Float64Array.from(numbers(text, Float32Array), (value, index) => value + plan.extent[0][index % columns]);
}

function exactly(when) { return [across, along, height].map((axis) => axis === null ? 0 : motion.at(axis, 0, when)); }

/* Where the tool point is drawn at a time: across, along and height. */
function seen(when) {
  const first = Math.max(Math.min(before(track.times, when), track.times.length - 2), 0), next = first + 1;
  const share = clamp((when - track.times[first]) / (track.times[next] - track.times[first]) || 0, 0, 1);
  const place = motion instanceof Exact ? exactly(when)
    : [0, 1, 2].map((k) => between(track.points[3 * first + k], track.points[3 * next + k], share));
  const foot = track.feet && [0, 1].map((k) => between(track.feet[2 * first + k], track.feet[2 * next + k], share));
  return magnified(place, foot);
}

/* Where an instant of the track is drawn. */
function shown(index) {
  const foot = track.feet && track.feet.subarray(2 * index, 2 * index + 2);
  return magnified(track.points.subarray(3 * index, 3 * index + 3), foot);
}

/* Draws a point farther from what it follows, if that is asked for. */
function magnified(place, foot) {
  if (state.magnified === 1 || !foot || Number.isNaN(foot[0])) return place;
  return [between(foot[0], place[0], state.magnified), between(foot[1], place[1], state.magnified), place[2]];
}

function spaceFigure(side, width) {
  const [right, up] = side.name === "plan" ? [0, 1] : [0, 2];
  const low = plan.extent[0], high = plan.extent[1];
  const margin = 0.06 * Math.max(high[right] - low[right], high[up] - low[up]) || 1;
  const shapes = [plan.tool, ...plan.hanging.map((held) => held.outline)].filter(Boolean).flat();
  const extra = margin + shapes.reduce((most, corner) => Math.max(most, ...corner.map(Math.abs)), 0);
  const inner = width - 84;
  const spanX = high[right] - low[right] + 2 * extra, spanY = high[up] - low[up] + 2 * extra;
  const tall = clamp(inner * spanY / spanX, 150, 460);
  const scale = Math.max(spanX / inner, spanY / tall);
  const middle = [(low[right] + high[right]) / 2, (low[up] + high[up]) / 2];
  const half = [scale * inner / 2, scale * tall / 2];
  const ends = [middle[1] - half[1], middle[1] + half[1]];
  if (side.falls) ends.reverse();
  const figure = plain({
    width, frame_width: Math.round(inner), frame_height: Math.round(tall),
    x_range: new Bokeh.Range1d({ start: middle[0] - half[0], end: middle[0] + half[0] }),
    y_range: new Bokeh.Range1d({ start: ends[0], end: ends[1] }),
  });
  figure.xaxis.axis_label = `${side.right}, mm`;
  figure.yaxis.axis_label = side.up === null ? "" : `${side.up}, mm`;
  const floor = side.falls ? high[2] + 10 * spanY : low[2] - 10 * spanY;
  const sky = side.falls ? low[2] - 10 * spanY : high[2] + 10 * spanY;
  keepouts(figure, side, floor, sky);
  const sources = {};
  const add = (name, data) => (sources[name] = new Bokeh.ColumnDataSource({ data }));
  if (side.name === "plan") {
    figure.multi_polygons({ field: "xs" }, { field: "ys" }, { source: add("bands", { xs: [], ys: [] }), fill_color: css("--band"), fill_alpha: 0.35, line_color: css("--band-edge"), line_width: 1 });
  }
  const lines = plan.drawn.map((own) => numbers(own.line, Float32Array));
  const column = (line, which) => Array.from({ length: line.length / 3 }, (_, k) => line[3 * k + which]);
  figure.multi_line({ field: "xs" }, { field: "ys" }, { source: add("drawn", { xs: lines.map((own) => column(own, right)), ys: lines.map((own) => column(own, up)) }), line_color: css("--drawn"), line_width: 1.2, line_dash: "dashed" });
  figure.line({ field: "x" }, { field: "y" }, { source: add("step", { x: [], y: [] }), line_color: css("--accent"), line_width: 11, line_alpha: 0.3, line_cap: "round" });
  figure.segment({ field: "x0" }, { field: "y0" }, { field: "x1" }, { field: "y1" }, { source: add("path", { x0: [], y0: [], x1: [], y1: [], color: [], width: [] }), line_color: { field: "color" }, line_width: { field: "width" }, line_cap: "round" });
  const room = scale * 12, taken = plan.meeting ? [meeting(figure, side, scale)] : [];
  if (side.name === "plan") names(figure, room, taken);
  for (const [name, color] of [["tool", "--accent"], ["part", "--part"]]) {
    figure.patch({ field: "x" }, { field: "y" }, { source: add(name, { x: [], y: [] }), fill_color: css(color), fill_alpha: 0.18, line_color: css(color), line_width: 1.3, ...OVER });
  }
  figure.scatter({ field: "x" }, { field: "y" }, { source: add("now", { x: [], y: [] }), size: 11, marker: "circle_cross", fill_color: css("--paper"), line_color: css("--accent"), line_width: 2, ...OVER });
  gestures(figure, {});
  const home = [{ start: middle[0] - half[0], end: middle[0] + half[0] }, { start: ends[0], end: ends[1] }];
  return { figure, side, right, up, sources, sky, home };
}

function keepouts(figure, side, floor, sky) {
  const xs = [], ys = [];
  for (const own of plan.keepouts) {
    const top = own.top === null ? sky : own.top;
    for (const outline of own.outlines) {
      const across = outline.map((corner) => corner[0]), left = Math.min(...across), right = Math.max(...across);
      xs.push(side.name === "plan" ? across : [left, right, right, left]);
      ys.push(side.name === "plan" ? outline.map((corner) => corner[1]) : [floor, floor, top, top]);
    }
  }
  const source = new Bokeh.ColumnDataSource({ data: { xs, ys } });
  figure.patches({ field: "xs" }, { field: "ys" }, { source, fill_color: css("--beyond"), fill_alpha: 0.12, line_color: css("--beyond"), hatch_pattern: "/", hatch_color: css("--beyond"), hatch_alpha: 0.5, hatch_scale: 8, hatch_weight: 0.6 });
}

function words(figure, x, y, text, options) {
  figure.add_layout(new Bokeh.Label({ x, y, text, text_font_size: "11px", text_color: css("--ink"), background_fill_color: css("--paper"), background_fill_alpha: 0.85, padding: 1, ...options }));
}

/* Names keep-outs where a name has room: the table of the cell has all of them. */
function names(figure, room, taken) {
  for (const own of plan.keepouts) {
    const highest = own.outlines.flat().reduce((one, other) => other[1] > one[1] ? other : one);
    const outline = own.outlines.find((corners) => corners.includes(highest)).map((corner) => corner[0]);
    const x = (Math.min(...outline) + Math.max(...outline)) / 2, half = own.name.length * room * 0.32;
    const box = [x - half, x + half, highest[1], highest[1] + 1.6 * room];
    if (taken.some((other) => box[0] < other[1] && other[0] < box[1] && box[2] < other[3] && other[2] < box[3])) continue;
    taken.push(box);
    words(figure, x, highest[1], own.name, { text_align: "center", text_baseline: "bottom", y_offset: 3 });
  }
}

/* Draws the smallest clearance; returns what its value covers. */
function meeting(figure, side, scale) {
  const own = plan.meeting, [one, other] = own.gap;
  const level = seen(own.time)[2];
  const ends = side.name === "plan" ? [one, other]
    : own.heights === null ? [[one[0], level], [other[0], level]] : [[one[0], own.heights[0]], [other[0], own.heights[1]]];
  const source = new Bokeh.ColumnDataSource({ data: { x: ends.map((p) => p[0]), y: ends.map((p) => p[1]) } });
  figure.line({ field: "x" }, { field: "y" }, { source, line_color: css("--warn"), line_width: 3 });
  figure.scatter({ field: "x" }, { field: "y" }, { source, size: 7, marker: "square", line_color: css("--warn"), fill_color: css("--paper"), line_width: 2 });
  const [x, y] = ends[1];
  words(figure, x, y, own.label, { x_offset: 8, y_offset: 8, text_font_size: "12px", padding: 2 });
  return [x - 8 * scale, x + (12 + 8 * own.label.length) * scale, y - 8 * scale, y + 28 * scale];
}

function refreshSpace(own) {
  const data = { x0: [], y0: [], x1: [], y1: [], color: [], width: [] };
  const look = [0, 1, 2, 3, 4].map((k) => [css(`--speed-${k}`), 1.6 + 1.1 * k]);
  let last = shown(0);
  for (let i = 1; i < track.times.length; i++) {
    const next = shown(i), [color, width] = look[track.classes[i - 1]];
    if (last[own.right] !== next[own.right] || last[own.up] !== next[own.up]) {
      data.x0.push(last[own.right]); data.y0.push(last[own.up]);
      data.x1.push(next[own.right]); data.y1.push(next[own.up]);
      data.color.push(color); data.width.push(width);
    }
    last = next;
  }
  own.sources.path.data = data;
  if (own.sources.bands) {
    const rings = plan.bands[String(state.magnified)] || [];
    own.sources.bands.data = {
      xs: rings.map((polygon) => [polygon.map((ring) => ring.map((corner) => corner[0]))]),
      ys: rings.map((polygon) => [polygon.map((ring) => ring.map((corner) => corner[1]))]),
    };
  }
}

function markIn(own) {
  const x = [], y = [];
  if (state.mark) {
    for (let i = before(track.times, state.mark.start); i < track.times.length && track.times[i] <= state.mark.end; i++) {
      const place = shown(i);
      x.push(place[own.right]); y.push(place[own.up]);
    }
  }
  own.sources.step.data = { x, y };
}

/* Shows less or more about the tool point; with a factor of 0 all of it. */
function zoomSpace(own, factor) {
  const at = seen(state.now);
  const ranges = [[own.figure.x_range, at[own.right], 0], [own.figure.y_range, at[own.up], 1]];
  for (const [range, about, which] of ranges) {
    const half = factor * (range.end - range.start) / 2;
    range.setv(factor ? { start: about - half, end: about + half } : own.home[which]);
  }
}

function placeTool(own) {
  const at = seen(state.now);
  own.sources.now.data = { x: [at[own.right]], y: [at[own.up]] };
  const part = plan.hanging.find((held) => held.start <= state.now && state.now < held.end);
  const span = (outline) => [Math.min(...outline.map((c) => c[0])), Math.max(...outline.map((c) => c[0]))];
  const up = own.side.falls ? -1 : 1;
  const box = (outline, below, top) => {
    const [left, right] = span(outline);
    return { x: [left, right, right, left].map((v) => at[0] + v), y: [at[2] - up * below, at[2] - up * below, top, top] };
  };
  const flat = (outline) => ({ x: outline.map((c) => at[0] + c[0]), y: outline.map((c) => at[1] + c[1]) });
  const none = { x: [], y: [] };
  const outlined = part && part.outline;
  if (own.side.name === "plan") {
    own.sources.tool.data = plan.tool ? flat(plan.tool) : none;
    own.sources.part.data = outlined ? flat(part.outline) : none;
  } else {
    own.sources.tool.data = plan.tool ? box(plan.tool, 0, own.sky) : none;
    own.sources.part.data = outlined ? box(part.outline, part.below, at[2]) : none;
  }
}

/* ---- one time for everything ---- */

function setNow(when) {
  state.now = clamp(Number.isFinite(when) ? when : 0, 0, plan.duration);
  for (const own of figures) own.now.location = state.now;
  for (const own of spaces) placeTool(own);
  $("scrub").value = state.now;
  const told = `${state.now.toFixed(plan.duration < 0.1 ? 6 : 3)} s`;
  $("clock").textContent = told;
  $("playhead").style.left = `${100 * state.now / (plan.duration || 1)}%`;
  const step = stepAt(state.now);
  $("at-step").textContent = step ? step.name : "";
  $("scrub").setAttribute("aria-valuetext", `${told}, ${step ? step.name : ""}`);
  readout();
}

function stepAt(when) {
  let found = null;
  for (const step of plan.steps) { if (step.start <= when && (when < step.end || found === null)) found = step; if (step.start > when) break; }
  return found;
}

const axisRows = plan.axes.map((_, axis) => rows(axis));

function readout() {
  for (let axis = 0; axis < plan.axes.length; axis++) {
    axisRows[axis].forEach((row, k) => {
      const cell = $(`value-${axis}-${k}`);
      const told = row.ends(state.now).map(digits);
      if (cell) cell.textContent = told[0] === told[1] ? told[0] : told.join(" to ");
    });
  }
}

function digits(value) {
  if (Math.abs(value) < 5e-10) return "0";
  return Math.abs(value) >= 1e5 ? Math.round(value).toString() : Number(value.toPrecision(6)).toString();
}

/* Shows a stretch of time in all figures; each has a range of its own, as they are drawn one by one. */
function setRange(from, to) {
  const span = clamp(to - from, LEAST, plan.duration || 1);
  const start = clamp(from, 0, Math.max(plan.duration - span, 0));
  if (start === state.from && start + span === state.to) return;
  state.from = start;
  state.to = start + span;
  for (const own of figures) own.stale = true;
  showWindow();
  catchUp();
}

/* Draws stale figures a few a frame, those that are seen first, so that a drag stays smooth. */
function catchUp() {
  if (catchUp.due) return;
  catchUp.due = requestAnimationFrame(() => {
    catchUp.due = 0;
    const stale = figures.filter((own) => own.stale).sort((one, other) => Number(other.visible) - Number(one.visible));
    stale.slice(0, AT_ONCE).forEach(shift);
    if (stale.length > AT_ONCE) catchUp();
  });
}

/* Brings a figure to the stretch of time that is shown: at once where it is seen, else soon. */
function shift(own) {
  if (!own.stale) return;
  own.stale = false;
  own.figure.x_range.setv({ start: state.from, end: state.to });
  refresh(own);
}

const watcher = new IntersectionObserver((entries) => {
  for (const entry of entries) {
    for (const own of entry.target.added) own.visible = entry.isIntersecting;
    if (entry.isIntersecting) catchUp();
  }
});

function showWindow() {
  const share = 100 / (plan.duration || 1);
  $("window").style.left = `${state.from * share}%`;
  $("window").style.width = `${(state.to - state.from) * share}%`;
  $("window").hidden = state.to - state.from > 0.999 * plan.duration;
}

function zoom(factor) {
  const inside = state.now >= state.from && state.now <= state.to;
  const about = inside ? state.now : (state.from + state.to) / 2;
  setRange(about - (about - state.from) * factor, about + (state.to - about) * factor);
}

function pan(share) {
  const span = state.to - state.from;
  setRange(state.from + share * span, state.to + share * span);
}

/* Marks a stretch of the cycle everywhere: {name, start, end}, or nothing. */
function mark(span) {
  if (state.mark?.name === span?.name) return;
  state.mark = span;
  for (const own of figures) own.mark.setv(span ? { left: span.start, right: span.end, visible: true } : { visible: false });
  for (const own of spaces) markIn(own);
  for (const element of document.querySelectorAll("[data-mark]")) {
    element.classList.toggle("marked", element.dataset.mark === span?.name);
  }
}

function play(on) {
  state.playing = on;
  $("play").textContent = on ? "Pause" : "Play";
  $("play").setAttribute("aria-pressed", String(on));
  if (!on) return;
  if (state.now >= plan.duration) setNow(0);
  let last = performance.now(), due = 0;
  const frame = (stamp) => {
    if (!state.playing) return;
    due += (stamp - last) / 1000 * Number($("pace").value);
    last = stamp;
    // Who asked for less motion sees four still pictures a second.
    if (due > 0 && (!calm.matches || due >= 0.25 * Number($("pace").value))) { setNow(state.now + due); due = 0; }
    if (state.now >= plan.duration) play(false); else requestAnimationFrame(frame);
  };
  requestAnimationFrame(frame);
}

/* ---- building, and the parts of the page that act ---- */

async function build() {
  figures = []; spaces = [];
  watcher.disconnect();
  for (const side of plan.sides) {
    const place = $(`view-${side.name}`);
    place.replaceChildren();
    const own = spaceFigure(side, place.clientWidth);
    spaces.push(own);
    refreshSpace(own); markIn(own); placeTool(own);
    await Bokeh.Plotting.show(own.figure, place);
  }
  for (let axis = 0; axis < plan.axes.length; axis++) {
    const place = $(`curves-${axis}`);
    place.replaceChildren();
    const added = axisRows[axis].map((row, k) => curveFigure(axis, row, place.clientWidth, k === axisRows[axis].length - 1));
    added.forEach(refresh);
    figures.push(...added);
    watcher.observe(Object.assign(place, { added }));
    await Bokeh.Plotting.show(added.map((own) => own.figure), place);
    if (axis === 0) ready("first");
    // What is ready is painted before more is made.
    await new Promise((done) => requestAnimationFrame(() => setTimeout(done)));
  }
  setNow(state.now);
  const marked = state.mark;
  state.mark = null;
  if (marked) mark(marked);
  ready("all");
}

/* Tells whoever looks how far the page is, and when it got there. */
function ready(state) {
  document.documentElement.dataset.ready = state;
  performance.mark(`ready ${state}`);
}

let building = Promise.resolve();
function rebuild() {
  document.documentElement.dataset.ready = "no";
  building = building.then(build);
}

function theme(name) {
  document.documentElement.dataset.theme = name;
  $("theme").textContent = name === "dark" ? "Light" : "Dark";
  $("theme").setAttribute("aria-label", `Switch to ${name === "dark" ? "light" : "dark"} colours`);
}

function legend() {
  if (!track) return;
  for (let k = 0; k < 5; k++) {
    const item = document.createElement("li"), line = document.createElement("span");
    line.className = "stroke";
    line.style.height = `${1.6 + 1.1 * k}px`;
    line.style.background = `var(--speed-${k})`;
    item.append(line, [k, k + 1].map((edge) => digits(Number((edge * track.most / 5).toPrecision(3)))).join(" to "));
    $("speeds").append(item);
  }
}

function act() {
  $("play").onclick = () => play(!state.playing);
  $("scrub").oninput = (event) => { play(false); setNow(Number(event.target.value)); };
  $("closer").onclick = () => zoom(0.5);
  $("wider").onclick = () => zoom(2);
  $("whole").onclick = () => setRange(0, plan.duration);
  $("earlier").onclick = () => pan(-0.25);
  $("later").onclick = () => pan(0.25);
  $("scale").onclick = () => {
    state.toLimits = !state.toLimits;
    $("scale").setAttribute("aria-pressed", String(state.toLimits));
    figures.forEach(refresh);
  };
  $("theme").onclick = () => { theme(document.documentElement.dataset.theme === "dark" ? "light" : "dark"); rebuild(); };
  if ($("magnify")) $("magnify").onchange = (event) => {
    state.magnified = Number(event.target.value);
    for (const own of spaces) { refreshSpace(own); markIn(own); placeTool(own); }
  };
  for (const element of document.querySelectorAll("[data-mark]")) {
    const { mark: name, start, end } = element.dataset;
    const span = { name, start: Number(start), end: Number(end) };
    for (const event of ["pointerenter", "focus"]) element.addEventListener(event, () => mark(span));
    for (const event of ["pointerleave", "blur"]) element.addEventListener(event, () => mark(null));
    element.addEventListener("click", () => {
      const room = 0.15 * (span.end - span.start) || 0.02 * plan.duration;
      setNow(span.start);
      setRange(span.start - room, span.end + room);
    });
  }
  // A row of the timeline is one stop of the Tab key, however many blocks it has.
  for (const lane of document.querySelectorAll(".lane")) {
    lane.addEventListener("keydown", (event) => {
      const step = { ArrowLeft: "previousElementSibling", ArrowRight: "nextElementSibling" }[event.key];
      const next = step ? event.target[step] : { Home: lane.firstElementChild, End: lane.lastElementChild }[event.key];
      if (!next) return;
      event.target.tabIndex = -1;
      next.tabIndex = 0;
      next.focus();
      event.preventDefault();
    });
  }
  for (const element of document.querySelectorAll("[data-view]")) {
    element.addEventListener("click", () => zoomSpace(spaces[element.dataset.view], Number(element.dataset.factor)));
  }
  document.addEventListener("keydown", (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    const typing = event.target.closest("input, select, button, a, summary");
    const keys = { "+": () => zoom(0.5), "-": () => zoom(2), "0": () => setRange(0, plan.duration), ",": () => pan(-0.25), ".": () => pan(0.25) };
    if (keys[event.key]) { keys[event.key](); event.preventDefault(); }
    else if (event.key === " " && !typing) { play(!state.playing); event.preventDefault(); }
    else if (event.key === "Escape") { mark(null); play(false); }
  });
  // What was drawn for the screen is shrunk to the paper, as it cannot be drawn anew in time.
  window.addEventListener("beforeprint", () => {
    for (const place of document.querySelectorAll(".drawing")) place.style.zoom = place.dataset.paper / place.offsetWidth;
  });
  window.addEventListener("afterprint", () => {
    for (const place of document.querySelectorAll(".drawing")) place.style.zoom = "";
  });
  let wide = innerWidth;
  window.addEventListener("resize", () => {
    clearTimeout(act.waiting);
    act.waiting = setTimeout(() => {
      if (Math.abs(innerWidth - wide) < 24) return;
      wide = innerWidth;
      rebuild();
    }, 250);
  });
}

// What is drawn over a figure stays within its frame, as all else does; a library that has no such
// part draws it a little beyond.
const drawer = Bokeh.GlyphRenderer?.prototype?.default_view?.prototype;
if (drawer) Object.defineProperty(drawer, "needs_clip", { get: () => true });
theme(matchMedia("(prefers-color-scheme: dark)").matches ? "dark" : "light");
legend();
act();
rebuild();
window.planPage = { plan, state, motion, setNow, setRange, figures: () => figures, spaces: () => spaces };
