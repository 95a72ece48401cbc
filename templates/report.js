// Tallies a choice of telescopes, bands, time and visits on the page, from the rows it carries.
"use strict";
(async () => {
  const source = document.getElementById("page-data");
  const panel = document.getElementById("choose");
  if (!source || !panel || !("DecompressionStream" in window)) return;
  const data = JSON.parse(source.textContent);
  const NBSP = "\u00a0";
  const SVG = "http://www.w3.org/2000/svg";
  const INK = "#1d2226", QUIET = "#565e64", RULE = "#c9ced2", ACCENT = "#0b5d6b";
  const { kinds, exposures, maps, telescopes, bands, nights, steps, settings } = data;
  const T = telescopes.length, B = bands.length, N = nights.length;

  // --- Elements ------------------------------------------------------------------------

  function make(name, attributes = {}, ...children) {
    const svg = /^(svg|path|rect|line|text|title|g)$/.test(name);
    const element = svg ? document.createElementNS(SVG, name) : document.createElement(name);
    for (const [key, value] of Object.entries(attributes)) {
      if (key.startsWith("on")) element.addEventListener(key.slice(2), value);
      else if (value === true) element.setAttribute(key, "");
      else if (value !== false && value !== null) element.setAttribute(key, value);
    }
    element.append(...children);
    return element;
  }
  const find = (selector, root = document) => root.querySelector(selector);
  const findAll = (selector, root = document) => [...root.querySelectorAll(selector)];

  // --- Unpacking -----------------------------------------------------------------------

  async function unpack() {
    const packed = Uint8Array.from(atob(data.block), (c) => c.charCodeAt(0));
    const stream = new Blob([packed]).stream().pipeThrough(new DecompressionStream("deflate"));
    const bytes = new Uint8Array(await new Response(stream).arrayBuffer());
    const types = { u1: Uint8Array, u2: Uint16Array, u4: Uint32Array, f4: Float32Array, f8: Float64Array };
    const columns = {};
    let at = 0;
    for (const [name, type, length] of data.columns) {
      const width = Number(type[1]);
      const out = new Uint8Array(length * width);
      for (let plane = 0; plane < width; plane++)
        for (let i = 0; i < length; i++) out[i * width + plane] = bytes[at + plane * length + i];
      columns[name] = new types[type](out.buffer);
      at += length * width;
    }
    return columns;
  }

  const columns = await unpack();
  const rows = columns.count.length;
  const FORMS = data.brackets ? [0, 1, 2] : [0];
  const members = new Uint32Array(columns.members.length);
  for (let row = 0, at = 0; row < rows; row++)
    for (let i = 0, kind = 0; i < columns.count[row]; i++, at++) members[at] = kind += columns.members[at];
  const area = FORMS.map((form) => columns[`area${form}`]);

  // A row's places lie outside a credible region, inside, or across its edge.
  function inRegion(name, whole) {
    const place = columns[`${name}.place`], across = columns[name];
    let next = 0;
    return Float64Array.from(place, (where, row) => [0, whole[row], where === 2 ? across[next++] : 0][where]);
  }
  const worth = maps.map((_, m) => {
    const p = FORMS.map((form) => columns[`map${m}.p${form}`]);
    const part = (name, whole) => inRegion(`map${m}.${name}`, whole);
    return { p, p50: part("p50", p[0]), p90: part("p90", p[0]), a90: part("a90", area[0]), strip: columns[`map${m}.strip`] };
  });

  // --- The tally -----------------------------------------------------------------------

  const everything = () => ({
    map: maps.length - 1,
    telescopes: telescopes.map(() => true),
    bands: bands.map(() => true),
    step: steps.length - 1,
    visits: 1,
  });
  const isEverything = (c) => JSON.stringify(c) === JSON.stringify(everything());

  // Groups of visits: all, each telescope, each band, each night.
  const ALL = 0, ofTelescope = (t) => 1 + t, ofBand = (b) => 1 + T + b, ofNight = (n) => 1 + T + B + n;
  const GROUPS = 1 + T + B + N;

  function emptySum() {
    return { area: [0, 0, 0], p: [0, 0, 0], p50: 0, p90: 0, a90: 0, again: 0, alone: 0, credit: 0, exposures: 0, depths: [], ends: [], starts: [] };
  }
  function addRow(sum, row, w) {
    for (const form of FORMS) {
      sum.area[form] += area[form][row];
      sum.p[form] += w.p[form][row];
    }
    sum.p50 += w.p50[row];
    sum.p90 += w.p90[row];
    sum.a90 += w.a90[row];
  }

  function tally(choice) {
    const chosen = kinds.step.map((step, k) => choice.telescopes[kinds.telescope[k]] && choice.bands[kinds.band[k]] && step <= choice.step);
    const sums = Array.from({ length: GROUPS }, emptySum);
    const byMap = maps.map(emptySum);
    const lines = Array.from({ length: 1 + T }, () => new Float64Array(steps.length));
    const number = new Uint32Array(GROUPS), first = new Float64Array(GROUPS), last = new Float64Array(GROUPS);
    const reached = new Int32Array(GROUPS);
    const w = worth[choice.map];
    for (let row = 0, at = 0; row < rows; row++) {
      const touched = [];
      for (const end = at + columns.count[row]; at < end; at++) {
        const k = members[at];
        if (!chosen[k]) continue;
        const start = data.whole ? kinds.start[k] : 0;
        const groups = [ALL, ofTelescope(kinds.telescope[k]), ofBand(kinds.band[k])];
        if (data.whole) groups.push(ofNight(kinds.night[k]));
        for (const group of groups) {
          if (number[group]++ === 0) {
            touched.push(group);
            first[group] = last[group] = start;
          }
          if (start < first[group]) first[group] = start;
          if (start > last[group]) last[group] = start;
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
      for (const group of [ALL, ofTelescope(kinds.telescope[k]), ofBand(kinds.band[k]), ofNight(exposures.night[e])]) {
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
    exposures.kind.forEach((k, e) => {
      const groups = [ALL, ofTelescope(kinds.telescope[k]), ofBand(kinds.band[k]), ofNight(exposures.night[e])];
      if (result.chosen[k] && groups.includes(group)) fields.add(exposures.footprint[e]);
    });
    let total = 0, square = 0;
    for (const field of fields) {
      const strip = worth[map].strip[field];
      total += strip;
      square += (0.06 * strip) ** 2 / Math.sqrt(data.pieces[field]);
    }
    return total > 0 ? Math.min(2 * Math.sqrt(square) * Math.min(width / total, 1), width) : 0;
  }

  // --- Words, as the report has them ---------------------------------------------------

  const EXACT = data.whole ? 1e-9 : 1e-6;
  const WORDS = "no one two three four five six seven eight nine ten eleven twelve".split(" ");
  const numberText = (value, digits = 0) =>
    value.toLocaleString("en-US", { minimumFractionDigits: digits, maximumFractionDigits: digits }).replace(/^-/, "−");
  const plural = (noun, n) => `${n === 0 ? "no" : numberText(n)}${NBSP}${noun}${n === 1 ? "" : "s"}`;
  const inWords = (noun, n) => `${WORDS[n] ?? numberText(n)}${NBSP}${noun}${n === 1 ? "" : "s"}`;
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

  function areaText([value, low, high]) {
    if (value <= 0) return `0${NBSP}deg²`;
    const half = (high - low) / 2;
    const error = half > 0 ? Math.min(half, 0.001 * value) : 0.001 * value;
    return `${numberText(value, clamp(-Math.floor(Math.log10(error)), 0, 6))}${NBSP}deg²`;
  }

  function median(values) {
    const sorted = [...values].sort((a, b) => a - b), half = sorted.length >> 1;
    return sorted.length % 2 ? sorted[half] : (sorted[half - 1] + sorted[half]) / 2;
  }
  const medians = (result) =>
    bands.map((band, b) => ({ band, depths: result.sums[ofBand(b)].depths })).filter((m) => m.depths.length)
      .map((m) => ({ band: m.band, limit: median(m.depths), text: `${numberText(median(m.depths), 2)}${NBSP}mag` }));

  const versionText = (map) => `map version “${maps[map].version}”`;
  const timesText = (visits) => (visits < 2 ? "" : visits === 2 ? " at least twice" : ` at least ${WORDS[visits] ?? visits} times`);

  function headlineText(result) {
    const { choice, sums } = result, all = sums[ALL], event = data.event.name;
    if (!all.exposures) return `No exposure of ${event} is in this choice, so it covers nothing.`;
    const used = telescopes.filter((_, t) => sums[ofTelescope(t)].exposures).length;
    const end = all.ends.at(-1), hours = hoursSince(end);
    const who = `By ${utc(end)}, ${hoursText(Math.abs(hours))} ${hours < 0 ? "before" : "after"} the event, ${inWords("telescope", used)} ${used === 1 ? "has" : "have"} covered`;
    const what = `the probability of ${versionText(choice.map)} for ${event}${timesText(choice.visits)}`;
    if (all.p[0] <= 0) return `${who} none of ${what}, with ${plural("exposure", all.exposures)}.`;
    const [value, bracket] = probabilityText(result, ALL, choice.map, all);
    return `${who} ${value}${bracket && ` (${bracket})`} of ${what}, with ${plural("exposure", all.exposures)} over ${areaText(all.area)}${depthText(medians(result))}.`;
  }
  function depthText(limits) {
    if (!limits.length) return "; their logs hold no limiting magnitude";
    const named = (limit) => `${limit.text} in ${limit.band}`;
    if (limits.length < 4)
      return `, to ${limits.length === 1 ? "a median limit" : "median limits"} of ${join(limits.map(named))} (${settings.terms})`;
    const sorted = [...limits].sort((a, b) => a.limit - b.limit);
    return `, to median limits between ${named(sorted[0])} and ${named(sorted.at(-1))} (${settings.terms})`;
  }

  function choiceText(choice) {
    const named = (flags, all, noun) => {
      const some = all.filter((_, i) => flags[i]);
      return some.length === all.length ? `every ${noun}` : some.length ? `${noun}${some.length > 1 ? "s" : ""} ${join(some)}` : `no ${noun}`;
    };
    const cut = choice.step < steps.length - 1 ? `; ended by ${steps[choice.step].text} (${steps[choice.step].since} after the event)` : "";
    const visits = choice.visits > 1 ? `; places visited${timesText(choice.visits)}` : "";
    return `A choice on ${versionText(choice.map)}: ${named(choice.telescopes, telescopes.map((t) => t.name), "telescope")}; ${named(choice.bands, bands, "band")}${cut}${visits}.`;
  }

  // --- Tables --------------------------------------------------------------------------

  const tables = findAll(".scroll > table").map((table) => {
    const body = [...find("tbody", table).rows];
    return { name: table.className, table, body: body.filter((row) => !row.classList.contains("total")), total: body.find((row) => row.classList.contains("total")), sort: null };
  });
  const tableOf = (name) => tables.find((t) => t.name === name);
  const nameOf = (row) => row.cells[0].textContent;

  // What a choice changes, as it was; put back when nothing is chosen any more.
  const originals = new Map();
  function keep(element) {
    if (!originals.has(element)) originals.set(element, [...element.childNodes].map((node) => node.cloneNode(true)));
    return element;
  }
  function restore() {
    for (const [element, nodes] of originals) {
      element.replaceChildren(...nodes.map((node) => node.cloneNode(true)));
      element.closest("tr")?.classList.remove("out");
    }
  }
  function say(element, text) {
    if (element) keep(element).textContent = text;
  }
  function setCell(cell, text, detail = "", bar = null) {
    keep(cell);
    const drawn = find("svg.bar", cell);
    cell.replaceChildren(text);
    if (detail) cell.append(make("span", { class: "detail" }, detail));
    if (!drawn) return;
    drawn.lastElementChild.setAttribute("width", (100 * clamp(bar ?? 0, 0, 1)).toFixed(2));
    cell.append(drawn);
  }
  // Fill the last cells of a row; null leaves one as it is.
  function fill(row, cells) {
    const from = row.cells.length - cells.length;
    cells.forEach((cell, i) => cell && setCell(row.cells[from + i], ...cell));
  }
  function fillRows(name, groupOf, scale, cells) {
    for (const row of tableOf(name)?.body ?? []) {
      const group = groupOf(nameOf(row));
      if (group === null) continue;
      const sum = scale.sums[group];
      row.classList.toggle("out", !sum.exposures);
      fill(row, cells(sum, group).map((cell) => (sum.exposures ? cell : cell && ["—"])));
    }
  }
  const indexIn = (names, groupOf) => (name) => (names.includes(name) ? groupOf(names.indexOf(name)) : null);
  const again = (sum) => [data.whole ? percent(sum.again) : "—"];

  function fillTables(result) {
    const { sums, byMap, choice } = result;
    const covered = (sum, group, map, most) => {
      const [text, detail] = probabilityText(result, group, map, sum);
      return [text, detail, most > 0 ? sum.p[0] / most : 0];
    };
    const count = (sum) => [numberText(sum.exposures)];
    const names = telescopes.map((t) => t.name), all = sums[ALL];
    fillRows("telescopes", indexIn(names, ofTelescope), result, (sum, group) => [
      count(sum), [areaText(sum.area)], covered(sum, group, choice.map, all.p[0]), [percent(sum.alone)], [percent(sum.credit)], again(sum),
    ]);
    const total = tableOf("telescopes")?.total;
    if (total) fill(total, [count(all), [areaText(all.area)], covered(all, ALL, choice.map, all.p[0]), null, [percent(all.p[0])], again(all)]);
    const most = (group, n) => Math.max(0, ...Array.from({ length: n }, (_, i) => sums[group(i)].p[0]));
    fillRows("bands", indexIn(bands, ofBand), result, (sum, group) => [
      count(sum), [areaText(sum.area)], covered(sum, group, choice.map, most(ofBand, B)), [percent(sum.p90)], again(sum),
    ]);
    if (data.whole)
      fillRows("nights", indexIn(nights, ofNight), result, (sum, group) => [
        sum.exposures ? [utc(sum.starts[0])] : [""], sum.exposures ? [utc(sum.ends.at(-1))] : [""],
        count(sum), [areaText(sum.area)], covered(sum, group, choice.map, most(ofNight, N)),
      ]);
    const best = Math.max(...byMap.map((sum) => sum.p[0]));
    for (const row of tableOf("maps")?.body ?? []) {
      const m = maps.findIndex((map) => map.version === nameOf(row));
      if (m < 0) continue;
      const sum = byMap[m];
      fill(row, [count(sum), covered(sum, ALL, m, best), [percent(sum.p50)], [percent(sum.p90)], [percent(sum.a90 / maps[m].area90)]]);
    }
    if (data.stepHours === 0)
      fillRows("milestones", indexIn(names, ofTelescope), result, (sum, group) => milestones(result, group));
    const last = tableOf("milestones")?.total;
    if (last && data.stepHours === 0) fill(last, milestones(result, ALL));
  }

  function milestones(result, group) {
    const sum = result.sums[group], final = sum.p[0];
    const points = curve(result, group);
    if (!points.length || final <= 0) return [["—"], ["—"], ["—"], ["—"], [percent(final)]];
    const when = (part) => points.find((point) => point.p >= part * final * (1 - 1e-12)).hours;
    return [[signed(points[0].hours)], [signed(when(0.5))], [signed(when(0.9))], [signed(points.at(-1).hours)], [percent(final)]];
  }
  // Probability after each step at which new sky was completed.
  function curve(result, group) {
    const found = [];
    let p = 0;
    result.lines[group].forEach((gain, step) => {
      if (gain > 0) found.push({ hours: steps[step].hours, p: (p += gain) });
    });
    return found;
  }

  function fillKeyFigures(result) {
    const { choice, sums } = result, all = sums[ALL], map = maps[choice.map];
    const [value, bracket] = probabilityText(result, ALL, choice.map, all);
    const exact = (a) => areaText([a, a, a]);
    const byBand = Object.fromEntries(medians(result).map((m) => [`median limit in ${m.band}`, [m.text, settings.terms]]));
    const figures = {
      "probability covered": [value, bracket || `of “${map.version}”`],
      "area observed": [areaText(all.area), `by ${plural("exposure", all.exposures)}`],
      [`of the 90${NBSP}% region`]: [percent(all.a90 / map.area90), `${exact(all.a90)} of ${exact(map.area90)}`],
      revisited: data.whole ? [percent(all.again), `≥${NBSP}${settings.revisitVisits} visits, ≥${NBSP}${settings.revisitMinutes}${NBSP}min`] : ["—", "not known for a choice"],
      ...byBand,
    };
    for (const figure of findAll(".key-figures > div")) {
      const label = find("dt", figure).textContent;
      setCell(find("dd", figure), ...(figures[label] ?? ["—", "none in this choice"]));
    }
  }

  // --- Sorting and copying -------------------------------------------------------------

  const ASCII = { "–": "-", "—": "-", "−": "-", "±": "+/-", "σ": "sigma", "²": "^2", "³": "^3", "≥": ">=", "≤": "<=", "“": '"', "”": '"', "‘": "'", "’": "'", "×": "x", "·": "-", "…": "..." };
  const plain = (text) => text.replace(/\s+/g, " ").replace(/[–—−±σ²³≥≤“”‘’×·…]/g, (c) => ASCII[c]).trim();
  const cellText = (cell) => {
    const detail = find(".detail", cell)?.textContent ?? "";
    const text = detail ? cell.textContent.slice(0, -detail.length) : cell.textContent;
    return plain(detail ? `${text} (${detail})` : text);
  };
  function tableText({ table }) {
    const lines = [...table.rows].map((row) => [...row.cells].map(cellText));
    const widths = lines[0].map((_, i) => Math.max(...lines.map((line) => (line[i] ?? "").length)));
    const numeric = [...table.tHead.rows[0].cells].map((cell) => cell.classList.contains("number"));
    const rowText = (line) => line.map((text, i) => (numeric[i] ? text.padStart(widths[i]) : text.padEnd(widths[i]))).join("  ").trimEnd();
    return [plain(find("caption", table).textContent), ...lines.map(rowText)].join("\n") + "\n";
  }
  async function copy(text, button) {
    try {
      await navigator.clipboard.writeText(text);
    } catch {
      const area = make("textarea", { readonly: true, "aria-label": "Text to copy" });
      area.value = text;
      document.body.append(area);
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
    const text = plain(cell.firstElementChild?.matches("svg.swatch") ? cell.textContent : cellText(cell));
    if (!numeric) return text;
    const number = text.match(/-?[\d,]*\.?\d+/);
    return number ? Number(number[0].replaceAll(",", "")) : null;
  }
  function applySort(t) {
    if (!t.sort) return;
    const { column, falling } = t.sort;
    const numeric = t.table.tHead.rows[0].cells[column].classList.contains("number");
    const keyed = t.body.map((row) => ({ row, key: sortValue(row.cells[column], numeric) }));
    // Missing numbers stay last either way.
    keyed.sort((a, b) => (a.key === null) - (b.key === null) || (falling ? -1 : 1) * (numeric ? a.key - b.key : a.key.localeCompare(b.key, "en", { numeric: true })));
    for (const { row } of keyed) row.parentNode.insertBefore(row, t.total ?? null);
  }
  for (const t of tables) {
    [...t.table.tHead.rows[0].cells].forEach((head, column) => {
      const numeric = head.classList.contains("number");
      const press = () => {
        const falling = t.sort?.column === column ? !t.sort.falling : numeric;
        t.sort = { column, falling };
        for (const other of t.table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
        head.setAttribute("aria-sort", falling ? "descending" : "ascending");
        applySort(t);
      };
      head.replaceChildren(make("button", { type: "button", class: "sort", onclick: press }, head.textContent));
    });
    t.table.after(copyButton("Copy this table as text", () => tableText(t)));
  }

  // --- Charts --------------------------------------------------------------------------

  const text = (x, y, words, more = {}) => make("text", { x, y, fill: INK, "font-size": 7, "font-family": "DejaVu Sans, Verdana, sans-serif", ...more }, words);
  const rule = (x1, y1, x2, y2, more = {}) => make("line", { x1, y1, x2, y2, stroke: RULE, "stroke-width": 0.6, ...more });
  const drawing = (height, label, ...children) => make("svg", { class: "figure", viewBox: `0 0 482.4 ${height}`, role: "img", "aria-label": label }, ...children);
  function redraw(name, draw) {
    const chart = find(`#figure-${name} .chart`);
    if (chart) keep(chart).replaceChildren(draw());
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
      const wide = (width * t.credit) / all, middle = { "text-anchor": "middle" };
      svg.append(make("rect", { x, y: 34, width: wide, height: 14, fill: t.colour, stroke: "#fff", "stroke-width": 0.8 }));
      if (wide > 4.7 * Math.max(t.name.length, 6)) svg.append(text(x + wide / 2, 57, t.name, middle), text(x + wide / 2, 66, percent(t.credit), middle));
      else unnamed.push(`${t.name} ${percent(t.credit)}`);
      x += wide;
    }
    const rest = unnamed.length > 4 ? `${unnamed.slice(0, 4).join(", ")}, ${unnamed.length - 4} more` : unnamed.join(", ");
    svg.append(text(x0 + width, 75, rest && `then ${rest}`, { "text-anchor": "end" }), text(x0, 6, `${percent(all)} covered by the choice`));
    return svg;
  }

  function timeline(result) {
    const curves = [ALL, ...telescopes.map((_, t) => ofTelescope(t))].map((group) => ({ group, points: curve(result, group) })).filter((c) => c.points.length);
    const final = result.sums[ALL].p[0], [left, right, top, bottom] = [34, 400, 14, 178];
    const svg = drawing(208, `Probability covered by the choice against hours since the event; in the end ${percent(final)}.`);
    if (!curves.length) return svg.append(text(left, 60, "Nothing is covered.")), svg;
    const times = curves.flatMap((c) => c.points.map((point) => point.hours));
    const low = Math.min(...times), high = Math.max(...times) * 1.02 + 0.01, log = low > 0 && high / low > 20;
    const from = log ? low * 0.8 : Math.min(0, low), scale = log ? Math.log : (v) => v;
    const x = (hours) => left + ((right - left) * (scale(hours) - scale(from))) / (scale(high) - scale(from));
    const unit = 10 ** Math.floor(Math.log10(final)), step = [0.2, 0.5, 1, 2].map((s) => s * unit).find((s) => final / s <= 5) ?? unit;
    const y = (p) => bottom - ((bottom - top) * p) / (Math.ceil(final / step) * step);
    for (let p = 0; p <= final + step * 0.999; p += step)
      svg.append(rule(left, y(p), right, y(p)), text(left - 4, y(p) + 2.5, numberText(100 * p, step < 0.001 ? 2 : step < 0.01 ? 1 : 0), { "text-anchor": "end" }));
    const gap = [0.1, 0.25, 0.5, 1, 2, 4, 6, 12, 24, 48, 96, 240, 480].find((g) => (high - from) / g <= 8) ?? 960;
    const marks = log ? [0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000] : Array.from({ length: 10 }, (_, i) => (Math.ceil(from / gap) + i) * gap);
    for (const h of marks.filter((h) => h >= from && h <= high))
      svg.append(rule(x(h), bottom, x(h), bottom + 3), text(x(h), bottom + 12, numberText(h, h && Math.abs(h) < 1 ? 2 : 0), { "text-anchor": "middle" }));
    svg.append(text((left + right) / 2, 203, "hours since the event", { "text-anchor": "middle" }), text(0, 8, `covered, % of all probability`));
    let above = Infinity;
    const ends = curves.map((c) => ({ ...c, at: y(c.points.at(-1).p) })).sort((a, b) => b.at - a.at);
    for (const { group, points, at } of ends) {
      const path = points.map((point, i) => `${i ? `H${x(point.hours).toFixed(1)}V` : `M${x(point.hours).toFixed(1)} ${bottom}V`}${y(point.p).toFixed(1)}`).join("") + `H${right}`;
      const t = telescopes[group - 1];
      svg.append(make("path", { d: path, fill: "none", stroke: t?.colour ?? INK, "stroke-width": t ? 1.1 : 1.7 }));
      above = Math.min(at + 2.5, above - 8);
      svg.append(text(right + 5, above, t?.name ?? "all together"), rule(right, at, right + 4, above - 2.5));
    }
    return svg;
  }

  // --- Fields on the chart -------------------------------------------------------------

  const byField = new Map();
  exposures.footprint.forEach((field, e) => byField.set(field, [...(byField.get(field) ?? []), e]));
  const overlays = [];
  const zoom = find("#figure-zoom .chart");
  const fieldName = (field, chosen) => {
    const shown = byField.get(field).filter((e) => chosen[exposures.kind[e]]);
    const first = shown.slice(0, 8).map((e) => `${exposures.name[e]} (${bands[kinds.band[exposures.kind[e]]]}, ${utc(exposures.start[e])})`);
    return `${telescopes[kinds.telescope[exposures.kind[byField.get(field)[0]]]].name}: ${join(first)}${shown.length > 8 ? ` and ${shown.length - 8} more` : ""}`;
  };
  function layOverlay() {
    const { panels, left, cut, hulls } = data.charts;
    if (!zoom || !panels.some((panel) => panel.paths.length)) return;
    const figure = find("svg.figure", zoom);
    const hint = `Point at a field, or step through them with the arrow keys, to see its exposures.${hulls ? " Of a camera, the outer edge is drawn." : ""}${cut ? ` The ${numberText(byField.size - left - cut)} most probable of ${numberText(byField.size - left)} fields can be pointed at.` : ""}${left ? ` ${plural("field", left)} given as cells ${left === 1 ? "has" : "have"} no outline.` : ""}`;
    const readout = make("p", { class: "readout", "aria-live": "polite" }, hint);
    const overlay = make("svg", { class: "overlay", viewBox: figure.getAttribute("viewBox"), role: "group", "aria-label": "Fields on the chart" });
    const name = (event) => (readout.textContent = event.currentTarget.getAttribute("aria-label"));
    const walk = (event) => {
      const by = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
      const shown = overlays.filter((o) => !o.path.classList.contains("out"));
      const at = shown.findIndex((o) => o.path === event.currentTarget);
      if (!by || at < 0) return;
      event.preventDefault();
      shown[at].path.setAttribute("tabindex", -1);
      const next = shown[(at + by + shown.length) % shown.length].path;
      next.setAttribute("tabindex", 0);
      next.focus();
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
    const layers = make("div", { class: "layers" });
    figure.before(layers);
    layers.append(figure, overlay);
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
    if (isEverything(c)) return "";
    const query = new URLSearchParams(), whole = everything();
    if (c.map !== whole.map) query.set("map", maps[c.map].version);
    const names = (key, flags, all) => {
      if (flags.every(Boolean)) return;
      if (!flags.some(Boolean)) query.append(key, "");
      all.forEach((one, i) => flags[i] && query.append(key, one));
    };
    names("telescope", c.telescopes, telescopes.map((t) => t.name));
    names("band", c.bands, bands);
    if (c.step !== whole.step) query.set("until", steps[c.step].until);
    if (c.visits > 1) query.set("visits", c.visits);
    return `#choice?${query}`;
  }
  function fromAddress() {
    const c = everything();
    if (!location.hash.startsWith("#choice?")) return [c, ""];
    const query = new URLSearchParams(location.hash.slice(8)), unknown = [];
    const pick = (key, all) => {
      const asked = query.getAll(key);
      unknown.push(...asked.filter((one) => one && !all.includes(one)));
      return asked.length ? all.map((one) => asked.includes(one)) : all.map(() => true);
    };
    c.telescopes = pick("telescope", telescopes.map((t) => t.name));
    c.bands = pick("band", bands);
    if (query.has("map")) {
      const map = maps.findIndex((m) => m.version === query.get("map"));
      if (map < 0) unknown.push(query.get("map"));
      else c.map = map;
    }
    if (query.has("until")) c.step = Math.max(0, steps.findLastIndex((step) => step.until <= query.get("until")));
    c.visits = clamp(Math.trunc(Number(query.get("visits"))) || 1, 1, data.visits);
    return [c, unknown.length ? ` The link also names ${join(unknown)}, which this report does not have.` : ""];
  }

  const status = make("p", { class: "choice", role: "status" });
  function buildControls() {
    const change = (apply) => (event) => {
      apply(event.currentTarget);
      update();
    };
    const box = (key, i, label, ...before) => {
      const input = make("input", { type: "checkbox", onchange: change((e) => (choice[key][i] = e.checked)) });
      control[key].push(input);
      return make("label", {}, input, ...before, label);
    };
    const swatch = (name) => {
      const row = tableOf("telescopes")?.body.find((r) => nameOf(r) === name);
      return row && find("svg.swatch", row) ? [find("svg.swatch", row).cloneNode(true)] : [];
    };
    control.telescopes = [];
    control.bands = [];
    control.map = make("select", { id: "choose-map", onchange: change((e) => (choice.map = e.selectedIndex)) }, ...maps.map((m) => make("option", {}, m.version)));
    control.step = make("input", { id: "choose-time", type: "range", min: 0, max: steps.length - 1, oninput: change((e) => (choice.step = Number(e.value))) });
    control.visits = make("select", { id: "choose-visits", onchange: change((e) => (choice.visits = e.selectedIndex + 1)) }, ...Array.from({ length: data.visits }, (_, i) => make("option", {}, String(i + 1))));
    control.time = make("output", { for: "choose-time" });
    const field = (id, label, ...inputs) => make("div", {}, make("label", { for: id }, label), ...inputs);
    const reset = make("button", { type: "button", class: "tool", onclick: () => ((choice = everything()), update()) }, "Show everything");
    const limits = data.whole ? "" : ` So that this page stays small, time is cut ${data.stepHours === 0 ? "after any exposure" : data.stepHours ? `every ${data.stepHours} h` : "nowhere"} and brackets, nights and revisits are not counted anew for a choice.`;
    panel.append(
      make("h2", { id: "choose-title" }, "Choose what counts"),
      make("fieldset", {}, make("legend", {}, "Telescopes"), ...telescopes.map((t, i) => box("telescopes", i, t.name, ...swatch(t.name)))),
      make("fieldset", {}, make("legend", {}, "Bands"), ...bands.map((b, i) => box("bands", i, b))),
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
  const followed = ["telescopes", "bands", "maps", ...(data.whole ? ["nights"] : []), ...(data.stepHours === 0 ? ["milestones"] : [])];
  const unmoved = [
    ...tables.filter((t) => !followed.includes(t.name) && t.table.closest("#telescopes, #maps, #time, #between, #depth, #distance")).map((t) => t.table.parentNode),
    ...findAll("main figure:not(#figure-credit, #figure-timeline)"),
    ...(data.stepHours === 0 ? [] : findAll("#figure-timeline")),
  ];
  for (const element of unmoved) element.prepend(make("p", { class: "unmoved" }, element.id === "figure-zoom" ? "Outlined: the fields of the choice. Colours and caption: the whole campaign." : "The whole campaign, not the choice."));

  function update(address = true, remark = "") {
    const result = tally(choice), choosing = !isEverything(choice), step = steps[choice.step];
    control.map.selectedIndex = choice.map;
    control.visits.selectedIndex = choice.visits - 1;
    control.step.value = choice.step;
    control.time.textContent = `${step.text}, ${step.since} after the event`;
    control.step.setAttribute("aria-valuetext", control.time.textContent);
    for (const key of ["telescopes", "bands"]) control[key].forEach((input, i) => (input.checked = choice[key][i]));
    document.body.classList.toggle("choosing", choosing);
    restore();
    status.textContent = (choosing ? choiceText(choice) : "Everything is shown.") + remark;
    if (choosing) {
      say(find(".headline"), headlineText(result));
      fillKeyFigures(result);
      fillTables(result);
      for (const name of ["telescopes", "between"]) if (name === "telescopes") say(find(`#${name} .lead`), `On ${versionText(choice.map)}, for the choice above.`);
      say(find("#table-telescopes caption"), `Each telescope of the choice on ${versionText(choice.map)}`);
      say(find("#table-maps caption"), "The choice on every map version");
      redraw("credit", () => creditBar(result));
      if (data.stepHours === 0) redraw("timeline", () => timeline(result));
    }
    for (const t of tables) applySort(t);
    showFields(result, choosing);
    if (address) history.replaceState(null, "", toAddress(choice) || location.pathname + location.search);
  }
  function read() {
    const [asked, remark] = fromAddress();
    choice = asked;
    update(false, remark);
  }

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
