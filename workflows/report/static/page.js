"use strict";
(() => {
  const data = JSON.parse(document.getElementById("data").textContent);
  const at = (id) => document.getElementById(id);

  // A set of units is the first and the last of each unbroken row of their numbers.
  function has(k, unit) {
    const set = data.sets[k];
    for (let i = 0; i < set.length && set[i] <= unit; i += 2) if (unit <= set[i + 1]) return true;
    return false;
  }
  const sizes = data.sets.map((set) => set.reduce((sum, end, i) => sum + (i % 2 ? end + 1 : -end), 0));
  const size = (k) => sizes[k];

  function element(tag, text, parent, name) {
    const made = document.createElement(tag);
    if (text !== undefined && text !== null) made.textContent = text;
    if (name) made.className = name;
    if (parent) parent.append(made);
    return made;
  }

  // -- the way data took through the graph ------------------------------------------------

  const elementsOf = data.outputs.map(() => []);
  data.elements.forEach(([k, index, values, geometry]) => elementsOf[k].push({ index, values, geometry }));
  const outputNumber = new Map(data.outputs.map(([node, output], k) => [node + "." + output, k]));
  const nodeNumber = new Map(data.nodes.map((name, i) => [name, i]));
  const into = data.nodes.map(() => []);
  data.edges.forEach(([source, output, target]) => into[target].push([source, output]));

  function placeOf(text) {
    const found = /^(.*)\.([^.[\]]+)((?:\[\d+\])*)$/.exec(text);
    if (!found || !nodeNumber.has(found[1])) return null;
    const index = [...found[3].matchAll(/\d+/g)].map((one) => Number(one[0]));
    return { node: nodeNumber.get(found[1]), output: found[2], index };
  }

  const named = (place) =>
    data.nodes[place.node] + "." + place.output + place.index.map((i) => "[" + i + "]").join("");

  // The element of what flows into a node that holds the unit, and the fewest others.
  function before(node, unit, role, not) {
    let best = null;
    for (const [source, output] of into[node]) {
      const k = outputNumber.get(source + "." + output);
      if (k === undefined || (not && not(source, output))) continue;
      for (const one of elementsOf[k]) {
        if (has(one[role], unit) && (!best || size(one[role]) <= best.size)) {
          best = { node: source, output, index: one.index, size: size(one[role]) };
        }
      }
    }
    return best;
  }

  function wayTo(place, unit, role) {
    const way = [named(place)];
    const seen = new Set();
    for (let node = place.node; !seen.has(node); ) {
      seen.add(node);
      let found = before(node, unit, role);
      if (!found && role === "geometry") {
        role = "values"; // a grid is taken from what was measured
        found = before(node, unit, role);
      }
      if (!found) break;
      way.unshift(named(found));
      node = found.node;
    }
    way.unshift(data.units[unit]);
    return way;
  }

  function listWay(parent, head, way) {
    element("p", head, parent);
    const list = element("ol", null, parent);
    way.forEach((step) => element("li", step, list));
  }

  // -- the touch map ----------------------------------------------------------------------

  const svg = at("touchmap");
  const frame = at("map");
  const says = at("cellsays");
  const tall = data.tall;
  let row = -1;
  let column = -1;
  let zoom = 1;

  const nearest = (list, get, value, length) => {
    let low = 0;
    let high = list.length - 1;
    while (low < high) {
      const middle = (low + high + 1) >> 1;
      if (get(list[middle]) <= value) low = middle;
      else high = middle - 1;
    }
    const off = value - get(list[low]);
    return off >= 0 && off <= length(list[low]) ? low : -1;
  };

  function stateWords(mask, units) {
    const chosen = units.some((unit) => has(mask.chosen, unit));
    const tested = units.some((unit) => has(mask.tested, unit));
    const geometry = units.some((unit) => has(mask.geometry, unit));
    const both = units.some((unit) => has(mask.chosen, unit) && has(mask.tested, unit));
    if (both && mask.verdict === "certified") return "chosen on it and tested on it, under a certificate";
    if (both) return mask.allowed ? "chosen on it and read in it: the values are marked biased" : "chosen on it and tested on it: a leak";
    if (tested) return geometry ? "tested on it; of it the mask took only geometry" : "tested on it, not chosen on it";
    if (chosen) return "chosen on it, not tested on it";
    return geometry ? "only its geometry was used" : "neither chosen nor tested on it";
  }

  function tell() {
    const mask = data.columns[column];
    const units = data.lines[row][0];
    says.replaceChildren();
    element("h4", data.units[units[0]] + (units.length > 1 ? " and " + (units.length - 1) + " more" : ""), says);
    element("p", "Mask " + mask.label + " of " + mask.regions + ": " + stateWords(mask, units) + ".", says, "state");
    element("p", "Verdict: " + mask.verdict + (mask.level ? ", " + mask.level + " level" : "") + ".", says);
    const [, maskPlace, node] = mask.places[0];
    const place = placeOf(maskPlace);
    const unit = units[0];
    const chosen = units.find((one) => has(mask.chosen, one));
    if (chosen !== undefined && place) listWay(says, "How it came to the mask:", wayTo(place, chosen, "values"));
    if (chosen === undefined && place && has(mask.geometry, unit)) {
      listWay(says, "How its geometry came to the mask:", wayTo(place, unit, "geometry"));
    }
    const tested = units.find((one) => has(mask.tested, one));
    if (tested !== undefined && nodeNumber.has(node)) {
      const target = nodeNumber.get(node);
      const not = place ? (source, output) => source === place.node && output === place.output : null;
      const found = before(target, tested, "values", not);
      if (found) listWay(says, "How it came to be read:", [...wayTo(found, tested, "values"), node]);
    }
    if (mask.origins.length) element("p", "From outside: " + mask.origins.join("; "), says);
  }

  function show(id, x, y, width, height) {
    const box = at(id);
    Object.entries({ x, y, width, height, visibility: "visible" }).forEach(([key, value]) => box.setAttribute(key, value));
  }

  function choose(toRow, toColumn, follow) {
    if (!data.lines.length || !data.columns.length) return;
    row = Math.max(0, Math.min(data.lines.length - 1, toRow));
    column = Math.max(0, Math.min(data.columns.length - 1, toColumn));
    const x = data.columns[column].x;
    const y = data.lines[row][1];
    const wide = data.columns[column].wide;
    show("cursor", x, y, wide, tall);
    show("rowline", 0, y, svg.viewBox.baseVal.width, tall);
    show("columnline", x, 0, wide, svg.viewBox.baseVal.height);
    if (follow) {
      const left = x * zoom - frame.clientWidth / 2;
      const top = y * zoom - frame.clientHeight / 2;
      frame.scrollTo(left, top);
    }
    tell();
  }

  function cellAt(event) {
    const box = svg.getBoundingClientRect();
    const scale = svg.viewBox.baseVal.width / box.width;
    const x = (event.clientX - box.left) * scale;
    const y = (event.clientY - box.top) * scale;
    return [
      nearest(data.lines, (line) => line[1], y, () => tall),
      nearest(data.columns, (mask) => mask.x, x, (mask) => mask.wide),
    ];
  }

  svg.addEventListener("pointermove", (event) => {
    const [overRow, overColumn] = cellAt(event);
    if (overRow >= 0 && overColumn >= 0 && (overRow !== row || overColumn !== column)) choose(overRow, overColumn, false);
  });
  svg.addEventListener("click", (event) => {
    const [overRow, overColumn] = cellAt(event);
    if (overRow < 0 || overColumn < 0) return;
    choose(overRow, overColumn, false);
    pick(data.columns[overColumn].places[0]);
  });
  frame.addEventListener("focus", () => {
    if (row < 0) choose(0, 0, false);
  });
  frame.addEventListener("keydown", (event) => {
    const moves = {
      ArrowUp: [-1, 0], ArrowDown: [1, 0], ArrowLeft: [0, -1], ArrowRight: [0, 1],
      PageUp: [-10, 0], PageDown: [10, 0], Home: [-1e9, 0], End: [1e9, 0],
    };
    if (moves[event.key]) {
      event.preventDefault();
      choose(row + moves[event.key][0], column + moves[event.key][1], true);
    } else if (event.key === "Enter" && row >= 0) {
      pick(data.columns[column].places[0]);
    }
  });

  function resize(factor) {
    zoom = Math.max(0.25, Math.min(8, zoom * factor));
    svg.setAttribute("width", svg.viewBox.baseVal.width * zoom);
    svg.setAttribute("height", svg.viewBox.baseVal.height * zoom);
  }
  at("larger").addEventListener("click", () => resize(1.4));
  at("smaller").addEventListener("click", () => resize(1 / 1.4));

  const names = new Map();
  data.lines.forEach(([units], i) => {
    units.forEach((unit) => {
      const subject = data.units[unit].split("_")[0];
      if (!names.has(subject)) names.set(subject, [i, -1]);
      names.set(data.units[unit], [i, -1]);
    });
  });
  data.columns.forEach((mask, i) => {
    mask.places.forEach(([region]) => names.set(region + ": " + mask.label, [-1, i]));
  });
  for (const name of names.keys()) element("option", null, at("findable")).value = name;
  at("find").addEventListener("input", () => {
    const wanted = at("find").value.trim().toLowerCase();
    if (!wanted) return;
    let found = null;
    for (const [name, where] of names) {
      const lower = name.toLowerCase();
      if (lower === wanted) {
        found = where;
        break;
      }
      if (!found && lower.includes(wanted)) found = where;
    }
    if (found && found[1] >= 0) choose(Math.max(row, 0), found[1], true);
    else if (found) {
      const units = data.lines[found[0]][0]; // shown where it was tested
      const tested = data.columns.findIndex((mask) => units.some((unit) => has(mask.tested, unit)));
      choose(found[0], Math.max(tested, 0), true);
    }
  });

  // -- the graph --------------------------------------------------------------------------

  const graph = at("graph");
  const boxes = [...graph.querySelectorAll(".box")];
  const edges = [...graph.querySelectorAll("path.edge")];
  const masks = data.columns.flatMap((mask) => mask.places.map((place) => ({ mask, place })));
  masks.forEach(({ mask, place }, i) => {
    element("option", place[0] + ": " + mask.label, at("pickmask")).value = i;
  });
  data.units.forEach((unit, i) => {
    element("option", unit, at("pickunit")).value = i;
  });

  function light(nodes, edgeLit, text) {
    graph.classList.toggle("picked", nodes !== null);
    boxes.forEach((box) => {
      const lit = nodes !== null && nodes.has(box.dataset.node);
      box.classList.toggle("lit", lit);
      box.setAttribute("aria-pressed", String(lit));
    });
    edges.forEach((edge) => edge.classList.toggle("lit", nodes !== null && edgeLit(edge.dataset.from, edge.dataset.to)));
    at("graphsays").textContent = text;
  }

  function upstream(start) {
    const found = new Set();
    const waiting = [start];
    while (waiting.length) {
      const node = waiting.pop();
      if (found.has(node)) continue;
      found.add(node);
      into[node].forEach(([source]) => waiting.push(source));
    }
    return found;
  }

  // Steps that are alike are drawn once: which node stands for each.
  const namesOf = (set) => new Set([...set].map((i) => data.nodes[i]));
  const drawnOf = (set) => new Set([...set].map((i) => data.nodes[data.drawn[i]]));

  function lightNode(name, head) {
    const found = upstream(nodeNumber.get(name));
    const others = [...namesOf(found)].filter((one) => one !== name);
    const drawn = drawnOf(found);
    light(drawn, (from, to) => drawn.has(from) && drawn.has(to),
      head + (others.length ? " Led to by " + others.join(", ") + "." : " Nothing in the graph leads to it."));
  }

  function lightMask(place) {
    const made = placeOf(place[1]);
    if (made) lightNode(data.nodes[made.node], "Mask of " + place[0] + ", made by " + data.nodes[made.node] + ".");
    else light(new Set(), () => false, "The mask of " + place[0] + " comes from outside: " + place[1] + ".");
  }

  function lightUnit(unit) {
    const outputs = new Set();
    elementsOf.forEach((list, k) => {
      if (list.some((one) => has(one.values, unit) || has(one.geometry, unit))) outputs.add(k);
    });
    const found = drawnOf([...outputs].map((k) => data.outputs[k][0]));
    const carried = new Set();
    data.edges.forEach(([source, output, target]) => {
      if (outputs.has(outputNumber.get(source + "." + output))) {
        carried.add(data.nodes[data.drawn[source]] + " " + data.nodes[data.drawn[target]]);
      }
    });
    light(found, (from, to) => carried.has(from + " " + to), data.units[unit] + " touched " + (found.size ? [...found].join(", ") : "nothing") + ".");
  }

  function pick(place) {
    at("pickmask").value = String(masks.findIndex((one) => one.place === place));
    at("pickunit").value = "";
    lightMask(place);
  }

  at("pickmask").addEventListener("change", () => {
    at("pickunit").value = "";
    if (at("pickmask").value === "") clear();
    else lightMask(masks[Number(at("pickmask").value)].place);
  });
  at("pickunit").addEventListener("change", () => {
    at("pickmask").value = "";
    if (at("pickunit").value === "") clear();
    else lightUnit(Number(at("pickunit").value));
  });
  function clear() {
    at("pickmask").value = "";
    at("pickunit").value = "";
    light(null, () => false, "Nothing is chosen.");
  }
  at("clear").addEventListener("click", clear);
  boxes.forEach((box) => {
    const chosen = () => {
      at("pickmask").value = "";
      at("pickunit").value = "";
      lightNode(box.dataset.node, box.dataset.node + ".");
    };
    box.addEventListener("click", chosen);
    box.addEventListener("keydown", (event) => {
      if (event.key === "Enter" || event.key === " ") {
        event.preventDefault();
        chosen();
      } else if (event.key === "Escape") clear();
    });
  });

  // -- the rest of the page ---------------------------------------------------------------

  const beside = at("beside");
  if (beside) {
    beside.addEventListener("change", () => {
      document.querySelectorAll(".figures > .beside").forEach((one) => (one.hidden = !beside.checked));
      document.querySelectorAll(".figures > .plain").forEach((one) => (one.hidden = beside.checked));
    });
    beside.dispatchEvent(new Event("change"));
  }
  // What scrolls can be reached by keyboard; what does not is no stop on the way.
  function reachable() {
    document.querySelectorAll(".scroll:not(#map), figure").forEach((one) => {
      if (one.scrollWidth > one.clientWidth + 1 || one.scrollHeight > one.clientHeight + 1) one.tabIndex = 0;
      else one.removeAttribute("tabindex");
    });
  }
  addEventListener("resize", reachable);
  document.addEventListener("toggle", reachable, true);
  reachable();
  addEventListener("beforeprint", () => {
    document.querySelectorAll("details.region").forEach((one) => (one.open = true));
  });
})();
