// Tallies a choice of telescopes, bands, time and visits on the page, from the rows it carries.
"use strict";
(async () => {
  const source = document.getElementById("page-data");
  const panel = document.getElementById("choose");
  if (!source || !panel || !("DecompressionStream" in window)) return;
  const data = JSON.parse(source.textContent);
  const NBSP = "\u00a0", SVG = "http://www.w3.org/2000/svg", INK = "#1d2226", RULE = "#c9ced2";
  const { kinds, exposures, maps, telescopes, bands, nights, steps, settings } = data;
  const T = telescopes.length, B = bands.length, N = nights.length, names = telescopes.map((t) => t.name);

  // --- Elements ------------------------------------------------------------------------
  function make(name, attributes = {}, ...children) {
    const svg = /^(svg|path|rect|line|text|title|g)$/.test(name);
    const element = svg ? document.createElementNS(SVG, name) : document.createElement(name);
    for (const [key, value] of Object.entries(attributes))
      if (key.startsWith("on")) element.addEventListener(key.slice(2), value);
      else element.setAttribute(key, value);
    element.append(...children);
    return element;
  }
  const find = (selector, root = document) => root?.querySelector(selector);
  const findAll = (selector, root = document) => [...root.querySelectorAll(selector)];

  // --- Unpacking -----------------------------------------------------------------------
  const packed = new Blob([Uint8Array.from(atob(data.block), (c) => c.charCodeAt(0))]);
  const stream = packed.stream().pipeThrough(new DecompressionStream("deflate"));
  const bytes = new Uint8Array(await new Response(stream).arrayBuffer());
  const types = { u1: Uint8Array, u2: Uint16Array, u4: Uint32Array, f4: Float32Array, f8: Float64Array };
  const columns = {};
  let at = 0;
  for (const [name, type, length] of data.columns) {
    const width = Number(type[1]), out = new Uint8Array(length * width);
    for (let plane = 0; plane < width; plane++)
      for (let i = 0; i < length; i++) out[i * width + plane] = bytes[at++];
    columns[name] = new types[type](out.buffer);
  }
  const rows = columns.count.length, FORMS = data.brackets ? [0, 1, 2] : [0];
  const members = new Uint32Array(columns.members.length);
  for (let row = 0, at = 0; row < rows; row++)
    for (let i = 0, kind = 0; i < columns.count[row]; i++, at++) members[at] = kind += columns.members[at];
  const area = FORMS.map((form) => columns[`area${form}`]);

  // A row's places lie outside a credible region, inside, or across its edge.
  function inRegion(name, whole) {
    let next = 0;
    return Float64Array.from(columns[`${name}.place`], (where, row) => (where === 2 ? columns[name][next++] : where && whole[row]));
  }
  const worth = maps.map((_, m) => {
    const p = FORMS.map((form) => columns[`map${m}.p${form}`]);
    const part = (name, whole) => inRegion(`map${m}.${name}`, whole);
    return { p, p50: part("p50", p[0]), p90: part("p90", p[0]), a90: part("a90", area[0]), strip: columns[`map${m}.strip`] };
  });

  // --- The tally -----------------------------------------------------------------------
  const yes = (list) => list.map(() => true);
  const everything = () => ({ map: maps.length - 1, telescopes: yes(telescopes), bands: yes(bands), step: steps.length - 1, visits: 1 });
  const isEverything = (c) => JSON.stringify(c) === JSON.stringify(everything());

  // Groups of visits: all, each telescope, each band, each night.
  const ALL = 0, ofTelescope = (t) => 1 + t, ofBand = (b) => 1 + T + b, ofNight = (n) => 1 + T + B + n;
  const GROUPS = 1 + T + B + N;
  const groupsOf = (k, night) => [ALL, ofTelescope(kinds.telescope[k]), ofBand(kinds.band[k]), ofNight(night)];
  const emptySum = () => ({ area: [0, 0, 0], p: [0, 0, 0], p50: 0, p90: 0, a90: 0, again: 0, alone: 0, credit: 0, exposures: 0, depths: [], ends: [], starts: [] });
  function addRow(sum, row, w) {
    for (const form of FORMS) sum.area[form] += area[form][row];
    for (const form of FORMS) sum.p[form] += w.p[form][row];
    for (const part of ["p50", "p90", "a90"]) sum[part] += w[part][row];
  }
  function tally(choice) {
    const chosen = kinds.step.map((step, k) => choice.telescopes[kinds.telescope[k]] && choice.bands[kinds.band[k]] && step <= choice.step);
    const sums = Array.from({ length: GROUPS }, emptySum), byMap = maps.map(emptySum), w = worth[choice.map];
    const lines = Array.from({ length: 1 + T }, () => new Float64Array(steps.length));
    const [number, first, last, reached] = Array.from({ length: 4 }, () => new Float64Array(GROUPS));
    for (let row = 0, at = 0; row < rows; row++) {
      const touched = [];
      for (const end = at + columns.count[row]; at < end; at++) {
        const k = members[at];
        if (!chosen[k]) continue;
        const start = kinds.start?.[k] ?? 0;
        for (const group of groupsOf(k, kinds.night[k])) {
          const fresh = number[group]++ === 0;
          if (fresh) touched.push(group);
          first[group] = fresh ? start : Math.min(first[group], start);
          last[group] = fresh ? start : Math.max(last[group], start);
          // Members come in order of the steps, so this is the visit that completes it.
          if (number[group] === choice.visits) reached[group] = kinds.step[k];
        }
      }
      const covered = number[ALL] >= choice.visits;
      const seen = touched.filter((group) => group > ALL && group <= T);
      for (const group of touched) {
        if (number[group] >= choice.visits) {
          addRow(sums[group], row, w);
          if (group <= T) lines[group][reached[group]] += w.p[0][row];
          if (number[group] >= settings.revisitVisits && last[group] - first[group] >= settings.revisitDays)
            sums[group].again += w.p[0][row];
        }
        number[group] = 0;
      }
      if (!covered) continue;
      for (const group of seen) sums[group].credit += w.p[0][row] / seen.length;
      if (seen.length === 1) sums[seen[0]].alone += w.p[0][row];
      for (let m = 0; m < maps.length; m++) addRow(byMap[m], row, worth[m]);
    }
    exposures.kind.forEach((k, e) => {
      if (!chosen[k]) return;
      if (exposures.force[e] >= 0) byMap[exposures.force[e]].exposures++;
      for (const group of groupsOf(k, exposures.night[e])) {
        sums[group].exposures++;
        sums[group].starts.push(exposures.start[e]);
        sums[group].ends.push(exposures.end[e]);
        if (exposures.depth[e] !== null) sums[group].depths.push(exposures.depth[e]);
      }
    });
    for (const sum of sums) for (const times of [sum.starts, sum.ends]) times.sort();
    return { choice, chosen, sums, byMap, lines };
  }
  // Twice the standard error of the centre rule, as the tally estimates it.
  function centreError(result, group, map, width) {
    const fields = new Set();
    exposures.kind.forEach((k, e) => result.chosen[k] && groupsOf(k, exposures.night[e]).includes(group) && fields.add(exposures.footprint[e]));
    let total = 0, square = 0;
    for (const field of fields) {
      total += worth[map].strip[field];
      square += (0.06 * worth[map].strip[field]) ** 2 / Math.sqrt(data.pieces[field]);
    }
    return total > 0 ? Math.min(2 * Math.sqrt(square) * Math.min(width / total, 1), width) : 0;
  }

  // --- Words, as the report has them ---------------------------------------------------
  const EXACT = data.whole ? 1e-9 : 1e-6;
  const WORDS = "no one two three four five six seven eight nine ten eleven twelve".split(" ");
  const numberText = (value, digits = 0) =>
    value.toLocaleString("en-US", { minimumFractionDigits: digits, maximumFractionDigits: digits }).replace(/^-/, "−");
  const plural = (noun, n, words = n === 0) => `${(words && WORDS[n]) || numberText(n)}${NBSP}${noun}${n === 1 ? "" : "s"}`;
  const join = (words) => (words.length < 2 ? words.join("") : `${words.slice(0, -1).join(", ")} and ${words.at(-1)}`);
  const utc = (iso) => `${iso.slice(0, 10)} ${iso.slice(11, 16)}${NBSP}UTC`;
  const hoursText = (hours) => `${numberText(hours, Math.abs(hours) < 9.995 ? 2 : Math.abs(hours) < 99.95 ? 1 : 0)}${NBSP}h`;
  const signed = (hours) => (hours < 0 ? hoursText(hours) : `+${hoursText(hours)}`);
  const hoursSince = (iso) => (Date.parse(iso) / 86400000 + 40587 - data.event.mjd) * 24;
  const clamp = (value, low, high) => Math.max(low, Math.min(high, value));
  const decimalsFor = (error, most) => (error > 0 ? clamp(-Math.floor(Math.log10(error) + 1e-9), 0, most) : most);

  function percent(fraction, digits = 1, unit = true) {
    const tail = unit ? `${NBSP}%` : "";
    if (fraction <= 0 || fraction >= 1 - EXACT) return (fraction <= 0 ? "0" : "100") + tail;
    const text = (100 * fraction).toFixed(digits);
    if (Number(text) === 0) return `<${NBSP}${(10 ** -digits).toFixed(digits)}${tail}`;
    if (Number(text) >= 100) return `>${NBSP}${(100 - 10 ** -digits).toFixed(digits)}${tail}`;
    return text + tail;
  }
  // The value, and its bracket where it is known and as narrow as was aimed at.
  function probabilityText(result, group, map, sum) {
    const [value, low, high] = sum.p;
    const most = value >= 0.01 ? 2 : 4;
    if (!data.brackets) return [percent(value, value > 0 ? maps[map].digits : most), ""];
    const width = high - low;
    if (width <= EXACT) return [percent(value, most), ""];
    // The estimate of the error is one for unions.
    const error = width > settings.bracketTarget && result.choice.visits === 1 ? centreError(result, group, map, width) : 0;
    if (error > 0) {
      const digits = decimalsFor(100 * error, most), text = percent(value, digits, false);
      const shown = (Math.ceil(100 * error * 10 ** digits - 1e-6) / 10 ** digits).toFixed(digits);
      return [/^\d/.test(text) ? `${text} ± ${shown}${NBSP}%` : `${text}${NBSP}%`, ""];
    }
    const digits = decimalsFor(50 * width, most), scale = 10 ** digits;
    const lower = Math.floor(100 * low * scale + 1e-6) / scale, upper = Math.ceil(100 * high * scale - 1e-6) / scale;
    const bracket = `${lower === 0 ? "0" : numberText(lower, digits)}–${upper >= 100 ? "100" : numberText(upper, digits)}${NBSP}%`;
    return [percent(value, digits), bracket];
  }
  // A union is known to a thousandth whatever its bracket; places visited more often are not.
  function areaText([value, low, high]) {
    if (value <= 0) return `0${NBSP}deg²`;
    const half = (high - low) / 2, most = choice.visits > 1 ? Infinity : 0.001 * value;
    const error = half > 1e-9 * value ? Math.min(Math.max(half, 1e-4 * value), most) : 0.001 * value;
    return `${numberText(value, clamp(-Math.floor(Math.log10(error)), 0, 6))}${NBSP}deg²`;
  }
  function median(values) {
    const sorted = [...values].sort((a, b) => a - b), last = sorted.length - 1;
    return (sorted[last >> 1] + sorted[(last + 1) >> 1]) / 2;
  }
  const medians = ({ sums }) =>
    bands.map((band, b) => ({ band, depths: sums[ofBand(b)].depths })).filter((m) => m.depths.length)
      .map((m) => ({ band: m.band, limit: median(m.depths), text: `${numberText(median(m.depths), 2)}${NBSP}mag` }));
  const versionText = (map) => `map version “${maps[map].version}”`;
  const timesText = (visits) => (visits < 2 ? "" : visits === 2 ? " at least twice" : ` at least ${WORDS[visits] ?? visits} times`);

  function depthText(limits) {
    if (!limits.length) return "; their logs hold no limiting magnitude";
    const named = limits.sort((a, b) => a.limit - b.limit).map((limit) => `${limit.text} in ${limit.band}`);
    const many = limits.length > 3 ? `between ${named[0]} and ${named.at(-1)}` : `of ${join(named)}`;
    return `, to ${limits.length === 1 ? "a median limit" : "median limits"} ${many} (${settings.terms})`;
  }
  function headlineText(result) {
    const { choice, sums } = result, all = sums[ALL], event = data.event.name;
    if (!all.exposures) return `No exposure of ${event} is in this choice, so it covers nothing.`;
    const used = telescopes.filter((_, t) => sums[ofTelescope(t)].exposures).length;
    const end = all.ends.at(-1), hours = hoursSince(end);
    const who = `By ${utc(end)}, ${hoursText(Math.abs(hours))} ${hours < 0 ? "before" : "after"} the event, ${plural("telescope", used, true)} ${used === 1 ? "has" : "have"} covered`;
    const what = `the probability of ${versionText(choice.map)} for ${event}${timesText(choice.visits)}`;
    if (all.p[0] <= 0) return `${who} none of ${what}, with ${plural("exposure", all.exposures)}.`;
    const [value, bracket] = probabilityText(result, ALL, choice.map, all);
    return `${who} ${value}${bracket && ` (${bracket})`} of ${what}, with ${plural("exposure", all.exposures)} over ${areaText(all.area)}${depthText(medians(result))}.`;
  }
  function choiceText(choice) {
    const named = (flags, all, noun) => {
      const some = all.filter((_, i) => flags[i]);
      return some.length === all.length ? `every ${noun}` : some.length ? `${noun}${some.length > 1 ? "s" : ""} ${join(some)}` : `no ${noun}`;
    };
    const cut = choice.step < steps.length - 1 ? `; ended by ${steps[choice.step].text} (${steps[choice.step].since} after the event)` : "";
    const visits = choice.visits > 1 ? `; places visited${timesText(choice.visits)}` : "";
    return `A choice on ${versionText(choice.map)}: ${named(choice.telescopes, names, "telescope")}; ${named(choice.bands, bands, "band")}${cut}${visits}.`;
  }

  // --- Tables --------------------------------------------------------------------------
  const tables = findAll(".scroll > table").map((table) => {
    const body = [...find("tbody", table).rows];
    return { name: table.className, table, body: body.filter((row) => !row.classList.contains("total")), total: body.find((row) => row.classList.contains("total")), sort: null };
  });
  const tableOf = (name) => tables.find((t) => t.name === name);
  const nameOf = (row) => row.cells[0].textContent;
  const followed = ["telescopes", "bands", "maps", ...(data.whole ? ["nights"] : []), ...(data.stepHours === 0 ? ["milestones"] : [])];

  // What a choice changes, as it was; put back when nothing is chosen any more.
  const originals = new Map();
  function keep(element) {
    if (!originals.has(element)) originals.set(element, [...element.childNodes].map((node) => node.cloneNode(true)));
    return element;
  }
  function restore() {
    for (const [element, nodes] of originals) element.replaceChildren(...nodes.map((node) => node.cloneNode(true)));
    for (const row of findAll('tr.out, tr[class=""]')) row.removeAttribute("class");
  }
  function say(selector, text) {
    const element = find(selector);
    if (element) keep(element).textContent = text;
  }
  function setCell(cell, text, detail = "", bar = 0) {
    const drawn = find("svg.bar", keep(cell));
    cell.replaceChildren(text, ...(detail ? [make("span", { class: "detail" }, detail)] : []), ...(drawn ? [drawn] : []));
    drawn?.lastElementChild.setAttribute("width", (100 * clamp(bar, 0, 1)).toFixed(2));
  }
  // Fill the last cells of a row; null leaves one as it is.
  const fill = (row, cells) => cells.forEach((cell, i) => cell && setCell(row.cells[row.cells.length - cells.length + i], ...cell));
  function fillRows(name, names, groupOf, { sums }, cells) {
    const table = followed.includes(name) && tableOf(name);
    if (!table) return;
    for (const row of table.body) {
      const at = names.indexOf(nameOf(row));
      if (at < 0) continue;
      const sum = sums[groupOf(at)];
      row.classList.toggle("out", !sum.exposures);
      fill(row, sum.exposures ? cells(sum, groupOf(at)) : cells(sum, groupOf(at)).map(() => ["—"]));
    }
    if (table.total) fill(table.total, cells(sums[ALL], ALL));
  }
  function fillTables(result) {
    const { sums, byMap, choice } = result, all = sums[ALL];
    const covered = (sum, group, map, most) => [...probabilityText(result, group, map, sum), most > 0 ? sum.p[0] / most : 0];
    const most = (group, list) => Math.max(...list.map((_, i) => sums[group(i)].p[0]));
    const count = (sum) => [numberText(sum.exposures)];
    const again = (sum) => [data.whole ? percent(sum.again) : "—"];
    fillRows("telescopes", names, ofTelescope, result, (sum, group) => [
      ...[count(sum), [areaText(sum.area)], covered(sum, group, choice.map, all.p[0])],
      ...(group === ALL ? [null, [percent(all.p[0])]] : [[percent(sum.alone)], [percent(sum.credit)]]),
      again(sum),
    ]);
    fillRows("bands", bands, ofBand, result, (sum, group) => [
      count(sum), [areaText(sum.area)], covered(sum, group, choice.map, most(ofBand, bands)), [percent(sum.p90)], again(sum),
    ]);
    fillRows("nights", nights, ofNight, result, (sum, group) => [
      [utc(sum.starts[0] ?? "")], [utc(sum.ends.at(-1) ?? "")], count(sum), [areaText(sum.area)], covered(sum, group, choice.map, most(ofNight, nights)),
    ]);
    fillRows("milestones", names, ofTelescope, result, (sum, group) => milestones(result, group));
    const best = Math.max(...byMap.map((sum) => sum.p[0]));
    for (const row of tableOf("maps")?.body ?? []) {
      const m = maps.findIndex((map) => map.version === nameOf(row)), sum = byMap[m];
      if (sum) fill(row, [count(sum), covered(sum, ALL, m, best), [percent(sum.p50)], [percent(sum.p90)], [percent(sum.a90 / maps[m].area90)]]);
    }
  }
  function milestones(result, group) {
    const final = result.sums[group].p[0], points = curve(result, group);
    if (!points.length || final <= 0) return [["—"], ["—"], ["—"], ["—"], [percent(final)]];
    const when = (part) => points.find((point) => point.p >= part * final * (1 - 1e-12)).hours;
    return [[signed(points[0].hours)], [signed(when(0.5))], [signed(when(0.9))], [signed(points.at(-1).hours)], [percent(final)]];
  }
  // Probability after each step at which new sky was completed.
  function curve(result, group) {
    const found = [];
    let p = 0;
    result.lines[group].forEach((gain, step) => gain > 0 && found.push({ hours: steps[step].hours, p: (p += gain) }));
    return found;
  }
  function fillKeyFigures(result) {
    const { choice, sums } = result, all = sums[ALL], map = maps[choice.map];
    const [value, bracket] = probabilityText(result, ALL, choice.map, all);
    const exact = (a) => areaText([a, a, a]);
    const byBand = Object.fromEntries(medians(result).map((m) => [`median limit in ${m.band}`, [m.text, settings.terms]]));
    const revisits = [percent(all.again), `at least ${plural("visit", settings.revisitVisits)}, ${settings.revisitMinutes}${NBSP}min apart`];
    const figures = {
      "probability covered": [value, bracket || `of “${map.version}”`],
      "area observed": [areaText(all.area), `by ${plural("exposure", all.exposures)}`],
      [`90${NBSP}% region covered`]: [percent(all.a90 / map.area90), `${exact(all.a90)} of ${exact(map.area90)}`],
      revisited: data.whole ? revisits : ["—", "not known for a choice"],
      ...byBand,
    };
    for (const figure of findAll(".key-figures > div"))
      setCell(find("dd", figure), ...(figures[find("dt", figure).textContent] ?? ["—", "none in this choice"]));
  }

  // --- Sorting and copying -------------------------------------------------------------
  const ASCII = { "–": "-", "—": "-", "−": "-", "±": "+/-", "σ": "sigma", "²": "^2", "³": "^3", "≥": ">=", "≤": "<=", "“": '"', "”": '"', "‘": "'", "’": "'", "×": "x", "·": "-", "…": "..." };
  const plain = (text) => text.replace(/\s+/g, " ").replace(/[–—−±σ²³≥≤“”‘’×·…]/g, (c) => ASCII[c]).trim();
  const cellText = (cell) => {
    const detail = find(".detail", cell)?.textContent;
    return plain(detail ? `${cell.textContent.slice(0, -detail.length)} (${detail})` : cell.textContent);
  };
  function tableText({ table }) {
    const lines = [...table.rows].map((row) => [...row.cells].map(cellText));
    const widths = lines[0].map((_, i) => Math.max(...lines.map((line) => (line[i] ?? "").length)));
    const pad = [...table.tHead.rows[0].cells].map((cell) => (cell.classList.contains("number") ? "padStart" : "padEnd"));
    const rowText = (line) => line.map((text, i) => text[pad[i]](widths[i])).join("  ").trimEnd();
    return [plain(find("caption", table).textContent), ...lines.map(rowText)].join("\n") + "\n";
  }
  async function copy(text, button) {
    try {
      await navigator.clipboard.writeText(text);
    } catch {
      const area = document.body.appendChild(make("textarea", { "aria-label": "Text to copy" }, text));
      area.select();
      document.execCommand("copy");
      area.remove();
    }
    const label = (button.dataset.label ??= button.textContent);
    button.textContent = "Copied";
    setTimeout(() => (button.textContent = label), 1500);
  }
  const copyButton = (label, textOf) => make("button", { type: "button", class: "tool", onclick: (event) => copy(textOf(), event.currentTarget) }, label);

  function sortValue(cell, numeric) {
    const number = cellText(cell).match(/-?[\d,]*\.?\d+/);
    return !numeric ? cellText(cell) : number && Number(number[0].replaceAll(",", ""));
  }
  function applySort(t) {
    if (!t.sort) return;
    const { column, falling, numeric } = t.sort;
    const keyed = t.body.map((row) => ({ row, key: sortValue(row.cells[column], numeric) }));
    // Missing numbers stay last either way.
    keyed.sort((a, b) => (a.key === null) - (b.key === null) || (falling ? -1 : 1) * (numeric ? a.key - b.key : a.key.localeCompare(b.key, "en", { numeric: true })));
    for (const { row } of keyed) row.parentNode.insertBefore(row, t.total ?? null);
  }
  for (const t of tables) {
    const heads = [...t.table.tHead.rows[0].cells];
    heads.forEach((head, column) => {
      const numeric = head.classList.contains("number");
      const press = () => {
        const falling = t.sort?.column === column ? !t.sort.falling : numeric;
        t.sort = { column, falling, numeric };
        for (const other of heads) other.removeAttribute("aria-sort");
        head.setAttribute("aria-sort", falling ? "descending" : "ascending");
        applySort(t);
      };
      head.replaceChildren(make("button", { type: "button", class: "sort", onclick: press }, head.textContent));
    });
    t.table.after(copyButton("Copy this table as text", () => tableText(t)));
  }

  // --- Charts --------------------------------------------------------------------------
  const text = (x, y, words, more = {}) => make("text", { x, y, fill: INK, "font-size": 7, "font-family": "DejaVu Sans, Verdana, sans-serif", ...more }, words);
  const middle = { "text-anchor": "middle" }, end = { "text-anchor": "end" };
  const rule = (x1, y1, x2, y2, more = {}) => make("line", { x1, y1, x2, y2, stroke: RULE, "stroke-width": 0.6, ...more });
  const drawing = (height, label, ...children) => make("svg", { class: "figure", viewBox: `0 0 482.4 ${height}`, role: "img", "aria-label": label }, ...children);
  function redraw(name, drawing, caption) {
    const figure = find(`#figure-${name}`);
    if (!figure) return;
    keep(find(".chart", figure)).replaceChildren(drawing);
    const words = keep(find("figcaption", figure));
    words.replaceChildren(words.firstElementChild, ` ${caption}`);
  }
  function creditBar(result) {
    const all = result.sums[ALL].p[0], width = 480, x0 = 1.2;
    const parts = telescopes.map((t, i) => ({ ...t, credit: result.sums[ofTelescope(i)].credit })).filter((t) => t.credit > 0).sort((a, b) => b.credit - a.credit);
    const label = parts.map((t) => `${t.name} ${percent(t.credit)}`).join(", ");
    const svg = drawing(78, `Shares of the probability covered by the choice: ${label || "none"}.`);
    svg.append(make("rect", { x: x0, y: 8, width, height: 12, fill: "#e9ecee" }), make("rect", { x: x0, y: 8, width: width * all, height: 12, fill: INK }));
    svg.append(rule(x0, 21, x0, 33), rule(x0 + width * all, 21, x0 + width, 33));
    let x = x0;
    const unnamed = [];
    for (const t of parts) {
      const wide = (width * t.credit) / all;
      svg.append(make("rect", { x, y: 34, width: wide, height: 14, fill: t.colour, stroke: "#fff", "stroke-width": 0.8 }));
      if (wide > 4.7 * Math.max(t.name.length, 6)) svg.append(text(x + wide / 2, 57, t.name, middle), text(x + wide / 2, 66, percent(t.credit), middle));
      else unnamed.push(`${t.name} ${percent(t.credit)}`);
      x += wide;
    }
    const rest = [...unnamed.slice(0, 4), ...(unnamed.length > 4 ? [`${unnamed.length - 4} more`] : [])].join(", ");
    svg.append(text(x0 + width, 75, rest && `then ${rest}`, end), text(x0, 6, `${percent(all)} covered by the choice`));
    return svg;
  }
  function timeline(result) {
    const curves = result.lines.map((_, group) => ({ group, points: curve(result, group) })).filter((c) => c.points.length);
    const final = result.sums[ALL].p[0], [left, right, top, bottom] = [34, 400, 14, 178];
    const svg = drawing(208, `Probability covered by the choice against hours since the event; in the end ${percent(final)}.`);
    if (!curves.length) return svg.append(text(left, 60, "Nothing is covered.")), svg;
    const times = curves.flatMap((c) => c.points.map((point) => point.hours));
    const from = Math.min(0, ...times), high = Math.max(...times) + 0.1;
    const x = (hours) => left + ((right - left) * (hours - from)) / (high - from);
    const unit = 10 ** Math.floor(Math.log10(final)), step = [0.2, 0.5, 1, 2].map((s) => s * unit).find((s) => final / s <= 5) ?? unit;
    const y = (p) => bottom - ((bottom - top) * p) / (Math.ceil(final / step) * step);
    for (let p = 0; p <= final + step * 0.999; p += step)
      svg.append(rule(left, y(p), right, y(p)), text(left - 4, y(p) + 2.5, numberText(100 * p, step < 0.001 ? 2 : step < 0.01 ? 1 : 0), end));
    const gap = [0.1, 0.25, 0.5, 1, 2, 4, 6, 12, 24, 48, 96, 240, 480].find((g) => (high - from) / g <= 8) ?? 960;
    for (let h = Math.ceil(from / gap) * gap; h <= high; h += gap)
      svg.append(rule(x(h), bottom, x(h), bottom + 3), text(x(h), bottom + 12, numberText(h, gap < 1 ? 2 : 0), middle));
    svg.append(text((left + right) / 2, 203, "hours since the event", middle), text(0, 8, "covered, % of all probability"));
    let above = Infinity;
    const ends = curves.map((c) => ({ ...c, at: y(c.points.at(-1).p) })).sort((a, b) => b.at - a.at);
    for (const { group, points, at } of ends) {
      const path = points.map((point, i) => `${i ? `H${x(point.hours).toFixed(1)}V` : `M${x(point.hours).toFixed(1)} ${bottom}V`}${y(point.p).toFixed(1)}`).join("") + `H${right}`;
      const t = telescopes[group - 1];
      svg.append(make("path", { d: path, fill: "none", stroke: t?.colour ?? INK, "stroke-width": t ? 1.1 : 1.7, "stroke-dasharray": t?.dash ?? "none" }));
      above = Math.min(at + 2.5, above - 8);
      svg.append(text(right + 5, above, t?.name ?? "all together"), rule(right, at, right + 4, above - 2.5));
    }
    return svg;
  }

  // --- Fields on the chart -------------------------------------------------------------
  const byField = new Map(), overlays = [], zoom = find("#figure-zoom .chart");
  exposures.footprint.forEach((field, e) => byField.set(field, [...(byField.get(field) ?? []), e]));
  const fieldName = (field, chosen) => {
    const shown = byField.get(field).filter((e) => chosen[exposures.kind[e]]);
    const first = shown.slice(0, 8).map((e) => `${exposures.name[e]} (${bands[kinds.band[exposures.kind[e]]]}, ${utc(exposures.start[e])})`);
    return `${names[kinds.telescope[exposures.kind[shown[0]]]]}: ${join(first)}${shown.length > 8 ? ` and ${shown.length - 8} more` : ""}`;
  };
  function layOverlay() {
    const { panels, left, cut, hulls } = data.charts, figure = find("svg.figure", zoom);
    if (!figure || !panels.some((panel) => panel.paths.length)) return;
    const known = byField.size - left, hint = ["Point at a field, or step through them with the arrow keys, to see its exposures."];
    if (hulls) hint.push("Of a camera, the outer edge is drawn.");
    if (cut) hint.push(`The ${numberText(known - cut)} most probable of ${numberText(known)} fields can be pointed at.`);
    if (left) hint.push(`${plural("field", left)} given as cells ${left === 1 ? "has" : "have"} no outline.`);
    const readout = make("p", { class: "readout", "aria-live": "polite" }, hint.join(" "));
    const overlay = make("svg", { class: "overlay", viewBox: figure.getAttribute("viewBox"), role: "group", "aria-label": "Fields on the chart" });
    const name = (event) => (readout.textContent = event.currentTarget.getAttribute("aria-label"));
    const walk = (event) => {
      const by = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
      const shown = overlays.filter((o) => !o.path.classList.contains("out"));
      const at = shown.findIndex((o) => o.path === event.currentTarget);
      if (!by || at < 0) return;
      event.preventDefault();
      shown[at].path.setAttribute("tabindex", -1);
      const { path } = shown[(at + by + shown.length) % shown.length];
      path.setAttribute("tabindex", 0);
      path.focus();
    };
    for (const { box, paths } of panels) {
      const frame = make("svg", { x: box[0], y: box[1], width: box[2], height: box[3], viewBox: `0 0 ${10 * box[2]} ${10 * box[3]}` });
      for (const [field, d] of paths) {
        const path = make("path", { d, role: "img", tabindex: -1, onmouseenter: name, onfocus: name, onkeydown: walk });
        overlays.push({ field, path, title: path.appendChild(make("title")) });
        frame.append(path);
      }
      overlay.append(frame);
    }
    zoom.append(make("div", { class: "layers" }, figure, overlay));
    zoom.after(readout);
  }
  function showFields({ chosen }, choosing) {
    let first = true;
    for (const { field, path, title } of overlays) {
      const out = !byField.get(field).some((e) => chosen[exposures.kind[e]]);
      path.setAttribute("class", out ? "out" : choosing ? "chosen" : "");
      path.setAttribute("tabindex", !out && first ? 0 : -1);
      first &&= out;
      if (out) continue;
      title.textContent = fieldName(field, chosen);
      path.setAttribute("aria-label", title.textContent);
    }
  }

  // --- The choice ----------------------------------------------------------------------
  let choice = everything();
  const control = {};

  function toAddress(c) {
    const query = new URLSearchParams();
    if (c.map < maps.length - 1) query.set("map", maps[c.map].version);
    for (const [key, flags, all] of [["telescope", c.telescopes, names], ["band", c.bands, bands]]) {
      if (!flags.some(Boolean)) query.append(key, "");
      all.forEach((one, i) => flags[i] && !flags.every(Boolean) && query.append(key, one));
    }
    if (c.step < steps.length - 1) query.set("until", steps[c.step].until);
    if (c.visits > 1) query.set("visits", c.visits);
    return `#choice?${query}`;
  }
  // Take the choice that the address names; returns what is to be said of it.
  function fromAddress() {
    const c = (choice = everything());
    if (!location.hash.startsWith("#choice?")) return "";
    const query = new URLSearchParams(location.hash.slice(8)), unknown = [];
    const pick = (key, all) => {
      const asked = query.getAll(key);
      unknown.push(...asked.filter((one) => one && !all.includes(one)));
      return all.map((one) => !asked.length || asked.includes(one));
    };
    c.telescopes = pick("telescope", names);
    c.bands = pick("band", bands);
    const map = pick("map", maps.map((m) => m.version)).indexOf(true);
    if (query.has("map") && map >= 0) c.map = map;
    if (query.has("until")) c.step = Math.max(0, steps.findLastIndex((step) => step.until <= query.get("until")));
    c.visits = clamp(Math.trunc(Number(query.get("visits"))) || 1, 1, data.visits);
    return unknown.length ? ` The link also names ${join(unknown)}, which this report does not have.` : "";
  }
  const status = make("p", { class: "choice", role: "status" });
  function buildControls() {
    const change = (apply) => (event) => (apply(event.currentTarget), update());
    const boxes = (key, title, labels) => {
      control[key] = labels.map((_, i) => make("input", { type: "checkbox", onchange: change((e) => (choice[key][i] = e.checked)) }));
      return make("fieldset", {}, make("legend", {}, title), ...labels.map((label, i) => make("label", {}, control[key][i], ...label)));
    };
    const swatch = (name) => {
      const row = tableOf("telescopes")?.body.find((r) => nameOf(r) === name);
      return find("svg.swatch", row ?? null)?.cloneNode(true) ?? "";
    };
    control.map = make("select", { id: "choose-map", onchange: change((e) => (choice.map = e.selectedIndex)) }, ...maps.map((m) => make("option", {}, m.version)));
    control.step = make("input", { id: "choose-time", type: "range", min: 0, max: steps.length - 1, oninput: change((e) => (choice.step = Number(e.value))) });
    control.visits = make("select", { id: "choose-visits", onchange: change((e) => (choice.visits = e.selectedIndex + 1)) }, ...Array.from({ length: data.visits }, (_, i) => make("option", {}, String(i + 1))));
    control.time = make("output", { for: "choose-time" });
    const field = (id, label, ...inputs) => make("div", {}, make("label", { for: id }, label), ...inputs);
    const reset = make("button", { type: "button", class: "tool", onclick: () => ((choice = everything()), update()) }, "Show everything");
    const cuts = { 0: "after any exposure", null: "nowhere" }[data.stepHours] ?? `every ${data.stepHours} h`;
    const limits = data.whole ? "" : ` So that this page stays small, time is cut ${cuts}, and brackets, nights and revisits are not counted anew for a choice.`;
    panel.append(
      make("h2", { id: "choose-title" }, "Choose what counts"),
      boxes("telescopes", "Telescopes", names.map((name) => [swatch(name), name])),
      boxes("bands", "Bands", bands.map((band) => [band])),
      make("div", { class: "fields" },
        field("choose-map", "Map version", control.map), field("choose-visits", "Visits, at least", control.visits),
        field("choose-time", "Exposures that ended by", control.step, control.time)),
      status,
      make("p", { class: "tools" }, reset,
        copyButton("Copy the choice as text", () => `${plain(find(".headline").textContent)}\n${plain(status.textContent)}\n`),
        copyButton("Copy the circular of the whole campaign", () => data.circular)),
      make("p", { class: "table-note" }, `Numbers are counted anew from the visits of every place, to the same digits. Tables that do not follow say so. The address holds the choice.${limits}`),
    );
    panel.hidden = false;
  }
  // What keeps to the whole campaign says so while a choice is shown.
  const unmoved = [
    ...tables.filter((t) => !followed.includes(t.name) && t.table.closest("#telescopes, #maps, #time, #between, #depth, #distance")).map((t) => t.table.parentNode),
    ...findAll("main figure:not(#figure-credit, #figure-timeline)"),
    ...(data.stepHours === 0 ? [] : findAll("#figure-timeline")),
  ];
  for (const element of unmoved)
    element.prepend(make("p", { class: "unmoved" }, element.id === "figure-zoom" ? "Outlined: the fields of the choice. Colours and caption: the whole campaign." : "The whole campaign, not the choice."));

  function update(address = true, remark = "") {
    const result = tally(choice), choosing = !isEverything(choice), step = steps[choice.step];
    [control.map.selectedIndex, control.visits.selectedIndex, control.step.value] = [choice.map, choice.visits - 1, choice.step];
    control.time.textContent = `${step.text}, ${step.since} after the event`;
    control.step.setAttribute("aria-valuetext", control.time.textContent);
    for (const key of ["telescopes", "bands"]) control[key].forEach((input, i) => (input.checked = choice[key][i]));
    document.body.classList.toggle("choosing", choosing);
    restore();
    status.textContent = (choosing ? choiceText(choice) : "Everything is shown.") + remark;
    if (choosing) {
      say(".headline", headlineText(result));
      fillKeyFigures(result);
      fillTables(result);
      say("#telescopes .lead", `On ${versionText(choice.map)}, for the choice above.`);
      say("#table-telescopes caption", `Each telescope of the choice on ${versionText(choice.map)}`);
      say("#table-maps caption", "The choice on every map version");
      redraw("credit", creditBar(result), "What several telescopes of the choice covered is shared equally among them, so that the shares add up to the total.");
      if (data.stepHours === 0) redraw("timeline", timeline(result), "Each telescope of the choice counts all it covered, shared or not.");
    }
    for (const t of tables) applySort(t);
    showFields(result, choosing);
    if (address) history.replaceState(null, "", choosing ? toAddress(choice) : location.pathname + location.search);
  }
  const read = () => update(false, fromAddress());
  layOverlay();
  buildControls();
  read();
  addEventListener("hashchange", () => location.hash.startsWith("#choice?") && read());
  // The address holds the choice, so a link within the page must not replace it.
  for (const link of findAll('a[href^="#"]'))
    link.addEventListener("click", (event) => {
      const target = document.getElementById(link.hash.slice(1));
      if (!target || isEverything(choice)) return;
      event.preventDefault();
      target.tabIndex = -1;
      target.focus();
    });
  document.documentElement.dataset.ready = "yes";
})();
