"use strict";
(() => {
  const told = JSON.parse(document.getElementById("told").textContent);
  const find = (id) => document.getElementById(id);
  const leftRoom = 62, rightRoom = 18, letter = 6.7;
  let opened = -1;  // number of the unit shown
  let data = null;  // its curve
  let cursor = -1;  // the point that is read
  let moveCursor = () => {};
  let order = told.units.map((_, unit) => unit);  // as the table shows them

  // -- numbers

  const minus = (text) => text.replace(/-/g, "\u2212");

  /** A value with a fixed number of decimals, thousands apart. */
  function plain(value, decimals) {
    if (Math.abs(value) >= 1e15 || decimals > 12) return minus(value.toPrecision(6));
    const [whole, part] = value.toFixed(Math.max(decimals, 0)).split(".");
    const apart = whole.replace(/\B(?=(\d{3})+$)/g, ",");
    return minus(part === undefined ? apart : `${apart}.${part}`);
  }

  /** Six significant digits, an exponent where it is shorter: what the tables of curves say. */
  function six(value) {
    const [digits, power] = value.toExponential(5).split("e");
    const exponent = Number(power);
    if (exponent >= -4 && exponent < 6) return String(Number(value.toPrecision(6)));
    const size = String(Math.abs(exponent)).padStart(2, "0");
    return `${Number(digits)}e${exponent < 0 ? "-" : "+"}${size}`;
  }

  /** Undo steps: each known value is told as what it adds to the one before. */
  function summed(steps, decimals) {
    let sum = 0;
    const value = () => (decimals >= 0 ? sum / 10 ** decimals : sum * 10 ** -decimals);
    return steps.map((step) => (step === null ? null : ((sum += step), value())));
  }

  function evenly(ends, count) {
    if (ends.length === count) return ends;
    const step = (ends[1] - ends[0]) / (count - 1);
    return Array.from({ length: count }, (_, i) => (i === count - 1 ? ends[1] : ends[0] + i * step));
  }

  /** Unpack a unit: compressed JSON in letters. */
  async function unpack(letters) {
    const bytes = Uint8Array.from(atob(letters), (one) => one.charCodeAt(0));
    const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("deflate"));
    const one = JSON.parse(await new Response(stream).text());
    const { picture } = one;
    const { decimals } = picture.y;
    const count = picture.status.length;
    for (const name of ["estimate", "lower", "upper"]) picture[name] = summed(picture[name], decimals);
    for (const limit of picture.limits) limit.values = summed(limit.values, decimals);
    picture.x.at = evenly(picture.x.at, count);
    if (typeof picture.x.labels[0] === "number") {
      picture.x.labels = evenly(picture.x.labels, count).map(six);
    }
    return one;
  }

  // -- drawing

  /** The tick labels that keep apart at this width. */
  function fitting(ticks, place) {
    let end = -Infinity;
    return ticks.filter(([at, text]) => {
      const half = 0.5 * letter * text.length;
      if (place(at) - half < end + 8) return false;
      end = place(at) + half;
      return true;
    });
  }

  function sheet(box, height) {
    const wide = Math.max(box.clientWidth, 300);
    d3.select(box).selectAll("svg").remove();
    const svg = d3.select(box).append("svg").attr("viewBox", `0 0 ${wide} ${height}`)
      .attr("aria-hidden", "true");
    return { svg, left: leftRoom, right: wide - rightRoom };
  }

  function write(parent, x, y, text, kind, anchor = "start") {
    return parent.append("text").attr("x", x).attr("y", y).attr("class", kind)
      .attr("text-anchor", anchor).text(text);
  }

  function stroke(parent, kind, x1, y1, x2, y2) {
    return parent.append("line").attr("class", kind)
      .attr("x1", x1).attr("y1", y1).attr("x2", x2).attr("y2", y2);
  }

  function tickAlong(svg, ticks, across, y) {
    for (const [at, text] of fitting(ticks, across)) {
      stroke(svg, "axis", across(at), y, across(at), y + 4);
      write(svg, across(at), y + 17, text, "tick", "middle");
    }
  }

  function clip(svg, name, left, top, right, bottom) {
    svg.append("clipPath").attr("id", name).append("rect").attr("x", left).attr("y", top)
      .attr("width", right - left).attr("height", bottom - top);
    return svg.append("g").attr("clip-path", `url(#${name})`);
  }

  /** One outline for each shade, of runs of equally dark cells. */
  function drawCells(group, cells, across, up) {
    const outlines = {};
    const count = cells.columns.length;
    const [low, high] = cells.ends;
    cells.columns.forEach((column, place) => {
      const left = across(place / count).toFixed(1), right = across((place + 1) / count).toFixed(1);
      for (let start = 0; start < column.length;) {
        let stop = start + 1;
        while (column[stop] === column[start]) stop += 1;
        if (column[start] !== "0") {
          const y = (row) => up(low + (row / column.length) * (high - low)).toFixed(1);
          const outline = `M${left} ${y(start)}V${y(stop)}H${right}V${y(start)}z`;
          outlines[column[start]] = (outlines[column[start]] ?? "") + outline;
        }
        start = stop;
      }
    });
    for (const [shade, outline] of Object.entries(outlines)) {
      group.append("path").attr("d", outline).style("fill", `var(--cell-${shade})`)
        .attr("shape-rendering", "crispEdges");
    }
  }

  /** Name weak stretches above the panel, the widest first, never one over another. */
  function drawRibbon(svg, weak, across, y) {
    const taken = [], named = new Set();
    for (const [name, from, to] of [...weak].sort((a, b) => b[2] - b[1] - (a[2] - a[1]))) {
      if (name !== "outside") stroke(svg, `ribbon ${name}`, across(from), y, across(to), y);
      const half = 0.5 * letter * name.length;
      let middle = 0.5 * (across(from) + across(to));
      middle = Math.min(Math.max(middle, across(0) + half), across(1) - half);
      const free = taken.every(([start, stop]) => middle + half < start || middle - half > stop);
      if (!free || (named.has(name) && across(to) - across(from) < 2 * half)) continue;
      taken.push([middle - half - 5, middle + half + 5]);
      named.add(name);
      write(svg, middle, y - 6, name, "note", "middle");
    }
  }

  function drawPicture() {
    const box = find("curve"), one = data.picture;
    const height = Math.round(Math.min(Math.max(0.36 * box.clientWidth, 220), 380));
    const top = 42, bottom = top + height, stripTop = bottom + 22, stripBottom = stripTop + 46;
    const { svg, left, right } = sheet(box, stripBottom + 46);
    const across = (share) => left + share * (right - left);
    const [low, high] = one.y.ends;
    const up = (value) => bottom - ((value - low) / (high - low)) * height;
    const at = one.x.at;

    write(svg, 0, 13, one.y.title, "title");
    const group = clip(svg, "panel", left, top, right, bottom);
    if (one.cells) drawCells(group, one.cells, across, up);
    for (const [value, text] of one.y.ticks) {
      stroke(svg, "grid", left, up(value), right, up(value)).lower();
      write(svg, left - 8, up(value) + 4, text, "tick", "end");
    }
    stroke(svg, "grid", left, bottom, right, bottom);
    const points = at.map((_, i) => i);
    if (one.own_points) {
      points.filter((i) => one.lower[i] !== null).forEach((i) =>
        stroke(group, "span", across(at[i]), up(one.lower[i]), across(at[i]), up(one.upper[i])));
      points.filter((i) => one.estimate[i] !== null).forEach((i) => group.append("circle")
        .attr("class", "point").attr("r", 4).attr("cx", across(at[i])).attr("cy", up(one.estimate[i])));
      for (const { values } of one.limits) {
        points.filter((i) => values[i] !== null).forEach((i) =>
          stroke(group, "limit", across(at[i]) - 6, up(values[i]), across(at[i]) + 6, up(values[i])));
      }
    } else {
      const area = d3.area().defined((_, i) => one.lower[i] !== null && one.upper[i] !== null)
        .x((_, i) => across(at[i])).y0((_, i) => up(one.lower[i])).y1((_, i) => up(one.upper[i]));
      group.append("path").attr("class", "area").attr("d", area(at));
      for (const limit of one.limits) {
        const line = d3.line().defined((_, i) => limit.values[i] !== null)
          .x((_, i) => across(at[i])).y((_, i) => up(limit.values[i]));
        group.append("path").attr("class", "limit").attr("d", line(at));
        // Its name stands where the curve is sure, at the right.
        const seen = (value, i) => value !== null && value < high && value > low && one.status[i] === "0";
        const last = limit.values.findLastIndex(seen);
        if (last < 0) continue;
        write(group, across(at[last]) - 4, up(limit.values[last]) - 6, limit.name, "note name", "end");
      }
      for (const kind of ["halo", "line"]) {
        for (const [status, start, stop] of one.strokes) {
          const line = d3.line().defined((i) => one.estimate[i] !== null)
            .x((i) => across(at[i])).y((i) => up(one.estimate[i]));
          group.append("path").attr("class", `${kind} ${status}`).attr("d", line(points.slice(start, stop)));
        }
      }
    }
    drawRibbon(svg, one.weak, across, top - 5);

    const { rows } = one;
    write(svg, left, stripTop - 4, rows.title, "note");
    const tall = (share) => stripBottom - Math.max(share, 0) * (stripBottom - stripTop);
    rows.heights.forEach((share, i) => {
      if (rows.counts[i] > 0) {
        const start = across(rows.edges[i]), stop = across(rows.edges[i + 1]);
        svg.append("rect").attr("class", "strip").attr("x", start).attr("width", stop - start)
          .attr("y", tall(share)).attr("height", stripBottom - tall(share));
      }
    });
    for (const [share, text] of rows.ticks) write(svg, left - 8, tall(share) + 4, text, "note", "end");
    stroke(svg, "axis", left, stripBottom, right, stripBottom);
    tickAlong(svg, one.x.ticks, across, stripBottom);
    write(svg, right, stripBottom + 38, one.x.title, "title", "end");

    const mark = svg.append("g").style("display", "none");
    stroke(mark, "cursor", 0, top, 0, stripBottom);
    const dot = svg.append("circle").attr("class", "here").attr("r", 5).style("display", "none");
    moveCursor = (place) => {
      const value = place < 0 ? null : one.estimate[place];
      mark.style("display", place < 0 ? "none" : null);
      dot.style("display", value === null ? "none" : null);
      if (place < 0) return;
      mark.attr("transform", `translate(${across(at[place])} 0)`);
      if (value !== null) dot.attr("cx", across(at[place])).attr("cy", up(value));
    };
    moveCursor(cursor);
    box.shareAt = (clientX) => {
      const frame = svg.node().getBoundingClientRect();
      const wide = svg.node().viewBox.baseVal.width;
      return (((clientX - frame.left) / frame.width) * wide - left) / (right - left);
    };
  }

  function drawCriteria() {
    const box = find("criteria"), one = data.criteria;
    const hidden = one === null;
    find("criteria-title").hidden = find("how").hidden = box.hidden = hidden;
    if (hidden) return;
    find("how").textContent = one.how;
    const lanes = one.paths.length, top = 58, bottom = top + 150;
    const laneTop = bottom + 6, laneBottom = laneTop + 22 * lanes;
    const { svg, left, right } = sheet(box, laneBottom + 46);
    const across = (share) => left + share * (right - left);
    const up = (share) => bottom - share * (bottom - top);
    write(svg, 0, 13, one.title, "title");
    let start = left;
    for (const path of [...one.paths].reverse()) {
      const kind = path.used ? "used-text" : "other-text";
      const text = write(svg, start, 36, path.text, kind);
      start += text.node().getComputedTextLength() + 24;
    }
    for (const [share, text] of one.y_ticks) {
      stroke(svg, "grid", left, up(share), right, up(share));
      write(svg, left - 8, up(share) + 4, text, "tick", "end");
    }
    const group = clip(svg, "valley", left, top, right, bottom + 4);
    if (one.given !== null) {
      const [share, text] = one.given;
      stroke(group, "cursor", across(share), top, across(share), bottom);
      const side = share < 0.7 ? 1 : -1;
      write(svg, across(share) + 6 * side, top + 8, text, "name", side > 0 ? "start" : "end");
    }
    one.paths.forEach((path, lane) => {
      const used = path.used ? " used" : "";
      const line = d3.line().defined((_, i) => path.up[i] !== null)
        .x((_, i) => across(path.at[i])).y((_, i) => up(path.up[i]));
      group.append("path").attr("class", `path${used}`).attr("d", line(path.at));
      const [best, least] = path.best;
      if (best !== null && least !== null) {
        group.append("circle").attr("class", `best${used}`).attr("r", 5)
          .attr("cx", across(best)).attr("cy", up(least));
      }
      const y = laneBottom - 22 * (lane + 1);
      const from = across(path.flat[0]), to = Math.max(across(path.flat[1]), from + 2);
      svg.append("rect").attr("class", `lane${used}`).attr("x", from).attr("width", to - from)
        .attr("y", y + 3).attr("height", 16);
      const text = write(svg, 0, y + 15, path.flat_text, "note");
      const wide = text.node().getComputedTextLength();
      if (to - from > wide + 14) {
        text.attr("x", 0.5 * (from + to)).attr("text-anchor", "middle")
          .attr("class", path.used ? "note on" : "note");
      } else if (right - to > wide + 8) {
        text.attr("x", to + 7);
      } else {
        text.attr("x", Math.max(from - 7, left + wide)).attr("text-anchor", "end");
      }
    });
    stroke(svg, "axis", left, laneBottom, right, laneBottom);
    tickAlong(svg, one.x_ticks, across, laneBottom);
    write(svg, right, laneBottom + 38, one.width_title, "title", "end");
  }

  // -- reading values

  function valuesAt(place) {
    const one = data.picture, { decimals } = one.y;
    const value = (number) => (number === null ? "none" : plain(number, decimals));
    const unit = (text, name) => (name && text !== "none" ? `${text} ${name}` : text);
    const lower = one.lower[place], upper = one.upper[place];
    const band = lower === null || upper === null ? "none" : `${value(lower)} to ${value(upper)}`;
    const at = one.x.at[place], { edges, counts } = one.rows;
    const last = counts.length - 1;
    const stretch = edges.findIndex((edge, i) => at >= edge && (at < edges[i + 1] || i === last));
    const digits = { maximumFractionDigits: 6 };
    const number = (count) => (count === null ? "none" : count.toLocaleString("en", digits));
    const sd = one.residual_sd[place];
    return [
      ["x", one.x.name, unit(one.x.labels[place], one.x.unit)],
      ["estimate", one.y.name, unit(value(one.estimate[place]), one.y.unit)],
      ["band", "band", unit(band, one.y.unit)],
      ["rows", "effective rows", number(one.effective_rows[place])],
      ["scatter", "residual sd", unit(sd === null ? "none" : minus(six(sd)), one.y.unit)],
      ["stretch", "rows in stretch", stretch < 0 ? "none" : number(counts[stretch] ?? 0)],
      ...one.limits.map(({ name, values }) =>
        ["limit", `limit ${name}`, unit(value(values[place]), one.y.unit)]),
      ["status", "status", one.statuses[Number(one.status[place])]],
    ];
  }

  function readAt(place) {
    cursor = place;
    const list = find("values"), box = find("curve");
    list.replaceChildren();
    moveCursor(place);
    if (place < 0) {
      const hint = document.createElement("p");
      hint.className = "hint";
      hint.textContent = "Point at the picture to read values, or go along the curve with the arrow keys.";
      list.append(hint);
      return;
    }
    const values = valuesAt(place);
    for (const [kind, name, text] of values) {
      const entry = document.createElement("div");
      const term = document.createElement("dt"), said = document.createElement("dd");
      entry.className = kind;
      term.textContent = name;
      said.textContent = text;
      entry.append(term, said);
      list.append(entry);
    }
    box.setAttribute("aria-valuenow", String(place + 1));
    box.setAttribute("aria-valuetext", values.map(([, name, text]) => `${name} ${text}`).join(", "));
  }

  function nearest(share) {
    const { at } = data.picture.x;
    let best = 0;
    at.forEach((one, i) => {
      if (Math.abs(one - share) < Math.abs(at[best] - share)) best = i;
    });
    return best;
  }

  function steer(event) {
    if (!data || event.ctrlKey || event.metaKey || event.altKey) return;
    const last = data.picture.x.at.length - 1;
    const step = event.shiftKey ? 10 : 1;
    const from = cursor < 0 ? Math.round(last / 2) : cursor;
    const moves = {
      ArrowLeft: from - step, ArrowDown: from - step, ArrowRight: from + step, ArrowUp: from + step,
      PageDown: from - 25, PageUp: from + 25, Home: 0, End: last,
    };
    if (!(event.key in moves)) return;
    event.preventDefault();
    readAt(Math.min(Math.max(moves[event.key], 0), last));
  }

  // -- a unit

  function warn(box, cautions) {
    box.replaceChildren(...cautions.map(({ text }) => {
      const line = document.createElement("p"), word = document.createElement("b");
      line.className = "caution";
      word.textContent = "Caution";
      line.append(word, ` ${text}`);
      return line;
    }));
  }

  function tellFacts(facts) {
    find("facts").replaceChildren(...facts.flatMap(([label, lines]) => {
      const term = document.createElement("dt"), said = document.createElement("dd");
      term.textContent = label;
      for (const line of lines) {
        const text = document.createElement("p");
        text.textContent = line;
        said.append(text);
      }
      return [term, said];
    }));
  }

  async function show(unit) {
    opened = unit;
    const one = told.units[unit];
    const curve = told.curves[unit];
    const canUnpack = typeof DecompressionStream === "function";
    const unpacked = curve === null || !canUnpack ? null : await unpack(curve);
    if (opened !== unit) return;  // another was opened meanwhile
    data = unpacked;
    cursor = -1;
    find("picture").hidden = data === null;
    find("reason").hidden = data !== null;
    find("reason").textContent = canUnpack ? one.reason : "This browser is too old to show a picture.";
    if (!told.single) {
      find("name").firstElementChild.textContent = one.name;
      find("fleet").hidden = true;
      find("unit").hidden = false;
      const place = order.indexOf(unit);
      find("before").disabled = place <= 0;
      find("after").disabled = place < 0 || place >= order.length - 1;
    }
    if (data !== null) {
      find("said").textContent = data.said;
      find("notes").textContent = data.notes;
      warn(find("about-curve"), data.cautions.curve);
      warn(find("about-search"), data.cautions.search);
      tellFacts(data.facts);
      const box = find("curve"), { x } = data.picture;
      box.setAttribute("aria-label", `Place along ${x.name}`);
      box.setAttribute("aria-valuemin", "1");
      box.setAttribute("aria-valuemax", String(x.at.length));
      box.setAttribute("aria-valuenow", "1");
      box.setAttribute("aria-valuetext", "no place yet");
      drawPicture();
      drawCriteria();
      readAt(-1);
    }
    document.body.dataset.unit = String(unit);
  }

  // -- the table

  const links = new Map(told.units.map((one, unit) => [one.link, unit]));
  let scrolled = 0;

  function unitInAddress() {
    const link = location.hash.slice(1);
    return link === "" ? -1 : links.get(link) ?? -1;
  }

  async function follow() {
    const unit = unitInAddress();
    if (unit >= 0) {
      if (opened < 0) scrolled = window.scrollY;
      await show(unit);
      window.scrollTo(0, 0);
      find("name").focus({ preventScroll: true });
      return;
    }
    const last = opened;
    opened = -1;
    data = null;
    delete document.body.dataset.unit;
    find("unit").hidden = true;
    find("fleet").hidden = false;
    if (last >= 0) {
      window.scrollTo(0, scrolled);
      const link = document.querySelector(`tr[data-unit="${last}"] a`);
      link.focus({ preventScroll: true });
      link.scrollIntoView({ block: "nearest" });
    }
  }

  function prepareTable() {
    const table = find("units"), body = table.tBodies[0];
    const rows = [...body.rows];  // by number of unit
    const texts = told.units.map((one) => one.find.toLowerCase());
    const heads = [...table.tHead.querySelectorAll("th")];
    let sorted = told.units.map((_, unit) => unit);
    let wanted = () => true;

    function arrange() {
      order = sorted.filter(wanted);
      const seen = new Set(order);
      rows.forEach((row, unit) => { row.hidden = !seen.has(unit); });
      const count = (number) => number.toLocaleString("en");
      find("shown").textContent = `${count(order.length)} of ${count(rows.length)} units`;
      find("nothing").hidden = order.length > 0;
    }

    function sort(column, descending) {
      const value = (unit) => told.units[unit].sort[column];
      const sign = descending ? -1 : 1;
      sorted = told.units.map((_, unit) => unit).sort((a, b) => {
        const left = value(a), right = value(b);
        if (left === null || right === null) return (left === null) - (right === null) || a - b;
        return sign * (left < right ? -1 : left > right ? 1 : 0) || a - b;
      });
      body.append(...sorted.map((unit) => rows[unit]));
      arrange();
    }

    table.tHead.addEventListener("click", (event) => {
      const button = event.target.closest("button");
      if (!button) return;
      const head = button.closest("th");
      const descending = head.getAttribute("aria-sort") === "ascending";
      for (const one of heads) one.removeAttribute("aria-sort");
      head.setAttribute("aria-sort", descending ? "descending" : "ascending");
      sort(Number(button.dataset.column), descending);
    });

    function filter() {
      const words = find("filter").value.toLowerCase().split(/\s+/).filter(Boolean);
      wanted = (unit) => words.every((word) => texts[unit].includes(word));
      arrange();
    }
    find("filter").addEventListener("input", filter);
    for (const button of document.querySelectorAll(".find")) {
      button.addEventListener("click", () => {
        const box = find("filter");
        box.value = box.value === button.dataset.find ? "" : button.dataset.find;
        filter();
      });
    }
    for (const choice of document.querySelectorAll("input[name=scale]")) {
      choice.addEventListener("change", () => {
        for (const group of body.querySelectorAll("g[data-common]")) {
          group.setAttribute("transform", choice.value === "common" ? group.dataset.common : "");
        }
      });
    }
    body.addEventListener("click", (event) => {
      const row = event.target.closest("tr");
      if (!row || event.target.closest("a") || String(window.getSelection())) return;
      location.hash = told.units[Number(row.dataset.unit)].link;
    });
    body.addEventListener("keydown", (event) => {
      const step = { ArrowDown: 1, ArrowUp: -1 }[event.key];
      const row = event.target.closest("tr");
      if (!step || !row) return;
      const next = order[order.indexOf(Number(row.dataset.unit)) + step];
      if (next === undefined) return;
      event.preventDefault();
      rows[next].querySelector("a").focus();
    });
    const go = (step) => () => {
      const next = order[order.indexOf(opened) + step];
      if (next !== undefined) location.replace(`#${told.units[next].link}`);
    };
    find("before").addEventListener("click", go(-1));
    find("after").addEventListener("click", go(1));
    document.addEventListener("keydown", (event) => {
      if (event.key === "Escape" && opened >= 0) location.hash = "";
    });
    window.addEventListener("hashchange", follow);
    arrange();
    return follow();
  }

  const box = find("curve");
  box.addEventListener("pointermove", (event) => data && readAt(nearest(box.shareAt(event.clientX))));
  box.addEventListener("pointerleave", () => data && document.activeElement !== box && readAt(-1));
  box.addEventListener("keydown", steer);
  let width = 0;
  new ResizeObserver(() => {
    if (!data || Math.abs(box.clientWidth - width) < 2 || window.matchMedia("print").matches) return;
    width = box.clientWidth;
    drawPicture();
    drawCriteria();
  }).observe(box);
  (told.single ? show(0) : prepareTable()).then(() => { document.body.dataset.ready = "yes"; });
})();
