// Draws the page from one table of figures. All text reaches the page as text nodes, never as markup.
function drawCarbonMap(place, data) {
  "use strict";
  const SVG = "http://www.w3.org/2000/svg";
  const HATCH = "url(#not-estimable)";
  const LARGEST_PX = 13, SMALLEST_LARGEST_PX = 3.5, SPACING_SHARE = data.parcels.length ? 0.25 : 0.42;
  const FEWEST_FOR_STRAYS = 5, STRAY_TIMES = 8, CLOSEST_ZOOM = 18, CLOSEST_ZOOM_PLOTS = 16;
  const NAME_PX = 12, NAME_SPILL = 1.1, NAME_SHIFTS = [0, -16, 16, -30, 30], MOST_NAMES = 300, MOST_DISCS = 2000;
  const D = {density: 0, densitySe: 1, densityLow: 2, densityHigh: 3, stock: 4, stockSe: 5, stockLow: 6, stockHigh: 7, plots: 8, method: 9};
  const C = {change: 0, se: 1, low: 2, high: 3, perYear: 4, perHaYear: 5, perHaYearSe: 6, co2: 7, paired: 8, since: 9, until: 10, years: 11, method: 12};

  // ---- small helpers ----
  function node(tag, options, ...children) {
    const element = document.createElement(tag);
    for (const [key, value] of Object.entries(options || {})) {
      if (key === "text") element.textContent = value;
      else if (key === "class") element.className = value;
      else element.setAttribute(key, value);
    }
    element.append(...children);
    return element;
  }
  function drawn(tag, options, ...children) {
    const element = document.createElementNS(SVG, tag);
    for (const [key, value] of Object.entries(options)) element.setAttribute(key, value);
    element.append(...children);
    return element;
  }
  const known = (value) => value !== null && value !== undefined;
  // A standard error is given to two significant digits, and its figure to the same decimals.
  function decimalsFor(spread, value) {
    const size = known(spread) && spread > 0 ? spread : Math.abs(value || 0) / 10;
    return size > 0 ? Math.min(6, Math.max(0, 1 - Math.floor(Math.log10(size)))) : 1;
  }
  function figure(value, decimals) {
    if (!known(value)) return "not known";
    const text = Math.abs(value).toLocaleString("en", {minimumFractionDigits: decimals, maximumFractionDigits: decimals});
    return (value < 0 && Number(text.replace(/,/g, "")) !== 0 ? "\u2212" : "") + text;
  }
  // With its unit, standard error and interval; a change carries its sign also where it is a gain.
  function estimate(value, se, low, high, unit, signed) {
    if (!known(value)) return "not estimable";
    const digits = decimalsFor(se, value);
    let text = (signed && value > 0 ? "+" : "") + figure(value, digits) + " " + unit;
    if (se === 0) return text + " (no variation between plots, so no interval)";
    if (known(se)) text += ", SE " + figure(se, digits);
    if (known(low) && known(high)) text += " (" + data.interval + " " + figure(low, digits) + " to " + figure(high, digits) + ")";
    return text;
  }
  function dioxide(found) {
    const way = found[C.co2] < 0 ? " (removal from the air)" : found[C.co2] > 0 ? " (emission)" : "";
    return estimate(found[C.co2], null, null, null, "t CO\u2082/yr", true) + way;
  }
  const plain = (value) => figure(value, decimalsFor(null, value));

  // ---- what a layer says of a parcel ----
  let pool = data.pools[0];
  const figuresOf = (units, layer, i) => pool[units][layer.kind === "density" ? "stocks" : "changes"][layer.at][i];
  const row = (layer, i) => figuresOf("parcels", layer, i);
  function shade(layer, i) {
    const found = row(layer, i);
    return found ? found[layer.kind === "density" ? D.density : C.perHaYear] : null;
  }
  function spansZero(layer, i) {
    const found = layer.kind === "change" ? row(layer, i) : null;
    return Boolean(found && known(found[C.low]) && found[C.low] <= 0 && found[C.high] >= 0);
  }
  // A parcel without plots of its own has the level of its stratum: to be told from the others at a glance.
  function fromModel(layer, i) {
    const found = row(layer, i);
    return Boolean(found) && data.methods[found[layer.kind === "density" ? D.method : C.method]].startsWith("synthetic");
  }
  function colour(layer, value) {
    const last = layer.colours.length - 1;
    let at = 0;
    while (at < last && value >= layer.edges[at + 1]) at += 1;
    return layer.colours[at];
  }
  function pairsFor(layer, found) {
    const method = ["Method", data.methods[found[layer.kind === "density" ? D.method : C.method]]];
    if (layer.kind === "density") {
      if (!known(found[D.density])) return [["Density", "not estimable"], method];
      return [
        ["Density", estimate(found[D.density], found[D.densitySe], found[D.densityLow], found[D.densityHigh], "t C/ha")],
        ["Stock", estimate(found[D.stock], found[D.stockSe], found[D.stockLow], found[D.stockHigh], "t C")],
        ["Plots", figure(found[D.plots], 0)], method];
    }
    if (!known(found[C.perHaYear])) return [["Change", "not estimable"], method];
    const paired = figure(found[C.paired], 0) + " measured at both surveys (" + figure(found[C.since], 0) + " and " + figure(found[C.until], 0) + " in all)";
    return [
      ["Change", estimate(found[C.change], found[C.se], found[C.low], found[C.high], "t C", true)],
      ["Per year", estimate(found[C.perYear], null, null, null, "t C/yr", true) + " over " + figure(found[C.years], 1) + " years"],
      ["Per ha, year", estimate(found[C.perHaYear], found[C.perHaYearSe], null, null, "t C/ha", true)],
      ["CO\u2082", dioxide(found)],
      ["Plots", paired], method];
  }
  function described(title, under, pairs) {
    const list = node("dl");
    for (const [label, text] of pairs) list.append(node("dt", {text: label}), node("dd", {text: text}));
    return node("div", {}, node("h3", {text: title}), node("p", {text: under}), list);
  }
  function parcelTip(i) {
    const [name, stratum, landUse, area] = data.parcels[i];
    const under = [known(area) ? plain(area) + " ha" : "", stratum && "stratum " + stratum, landUse].filter(Boolean).join(" \u00b7 ");
    const found = row(shown, i);
    return described(name, under, [["Layer", shown.title], ...(found ? pairsFor(shown, found) : [["Figure", "not estimable"]])]);
  }
  function parcelLabel(i) {
    const value = shade(shown, i);
    return data.parcels[i][0] + ": " + (known(value) ? plain(value) + " " + shown.unit : "not estimable");
  }

  // ---- the map ----
  const map = L.map(place, {center: [0, 0], zoom: 1, zoomSnap: 0.25, maxZoom: 21, attributionControl: Boolean(data.tiles)});
  if (map.attributionControl) map.attributionControl.setPrefix("Leaflet");
  L.control.scale().addTo(map);
  map.createPane("plots").style.zIndex = 450;
  map.createPane("names").style.zIndex = 460;
  map.getPane("names").style.pointerEvents = "none";
  // The map opens on what stands there now: the density at the latest survey.
  let shown = pool.layers.filter((layer) => layer.kind === "density").pop() || pool.layers[0];

  function parcelStyle(feature) {
    const i = feature.properties.i, value = shade(shown, i), open = spansZero(shown, i), model = fromModel(shown, i);
    return {fill: true, fillOpacity: data.tiles ? 0.8 : 1, fillColor: known(value) ? colour(shown, value) : HATCH,
      color: "#2b332f", weight: open || model ? 2 : 1, dashArray: model ? "1 5" : open ? "5 4" : null, opacity: 0.9};
  }
  const parcels = L.geoJSON(data.shapes, {
    style: parcelStyle,
    onEachFeature: (feature, layer) => {
      layer.bindTooltip(() => parcelTip(feature.properties.i), {sticky: true, className: "figures-tip", opacity: 1});
      layer.on({mouseover: () => layer.setStyle({weight: 3, dashArray: null}), mouseout: () => layer.setStyle(parcelStyle(feature))});
    },
  }).addTo(map);

  const bounds = L.latLngBounds([]);
  // A plot with a slipped coordinate may lie far off: where there are parcels, they alone set the view; elsewhere plots
  // many times further out than nearly all others are left out of it.
  function withoutStrays(places) {
    const middle = (at) => places.map((place) => place[at]).sort((a, b) => a - b)[Math.floor(places.length / 2)];
    const centre = L.latLng(middle(0), middle(1)), distances = places.map((place) => centre.distanceTo(place));
    const most = [...distances].sort((a, b) => a - b)[Math.floor(0.9 * (places.length - 1))];
    return places.length < FEWEST_FOR_STRAYS || !(most > 0) ? places : places.filter((_, at) => distances[at] <= STRAY_TIMES * most);
  }
  const inView = data.shapes.features.length ? [] : withoutStrays(data.plots.map((plot) => plot.at));
  if (data.shapes.features.length) bounds.extend(parcels.getBounds());
  else inView.forEach((place) => bounds.extend(place));
  const farOff = data.shapes.features.length ? 0 : data.plots.length - inView.length;

  // The size of a plot shows its density at the survey in view; of a change, at the later survey.
  const surveyAt = (layer) => (layer.kind === "density" ? layer.at : data.surveys.indexOf(data.pairs[layer.at][1]));
  let densest = 0; // of the pool in view
  const findDensest = () => { densest = pool.density.reduce((most, plot) => plot.reduce((a, b) => Math.max(a, b || 0), most), 0); };
  let largest = LARGEST_PX; // of the discs; less where many plots crowd the view, so that they do not hide the parcels
  const least = () => Math.min(2.5, largest / 2), absent = () => Math.min(3.5, largest);
  const radius = (density) => Math.max(least(), densest > 0 ? largest * Math.sqrt(Math.max(density, 0) / densest) : 0);
  function fitDiscs() {
    if (!data.plots.length || !bounds.isValid()) return;
    const size = map.project(bounds.getNorthWest()).subtract(map.project(bounds.getSouthEast()));
    const longest = Math.max(Math.abs(size.x), Math.abs(size.y));
    if (longest < 1) return; // one plot, or all in one place
    const spacing = Math.sqrt(Math.max(Math.abs(size.x * size.y), longest * longest / 10) / data.plots.length);
    largest = Math.min(LARGEST_PX, Math.max(SMALLEST_LARGEST_PX, SPACING_SHARE * spacing));
  }
  function plotStyle(at) {
    const plot = data.plots[at], density = pool.density[at][surveyAt(shown)];
    const base = {color: "#111", weight: largest < 6 ? 0.8 : 1.3, opacity: 1, fillColor: "#fff", fillOpacity: 0.8, dashArray: null};
    if (!plot.inside) return {...base, radius: absent(), color: "#b3261e", weight: 2, fillOpacity: 0};
    if (!known(density)) return {...base, radius: absent(), dashArray: "2 2", fillOpacity: 0};
    if (!data.parcels.length && shown.kind === "density") return {...base, radius: radius(density), fillColor: colour(shown, density), fillOpacity: 1};
    return {...base, radius: radius(density)};
  }
  function plotTip(at) {
    const plot = data.plots[at], density = pool.density[at];
    const under = [plot.parcel && "parcel " + plot.parcel, plot.stratum && "stratum " + plot.stratum, !plot.inside && "outside all parcels, not counted"];
    const pairs = data.surveys.map((survey, k) => ["Density " + survey, known(density[k]) ? plain(density[k]) + " t C/ha" : "not measured"]);
    return described("Plot " + plot.plot, under.filter(Boolean).join(" \u00b7 "), data.pools.length > 1 ? [["Pool", pool.name], ...pairs] : pairs);
  }
  findDensest();
  const marks = data.plots.map((plot, at) => L.circleMarker(plot.at, {pane: "plots", ...plotStyle(at)})
    .bindTooltip(() => plotTip(at), {className: "figures-tip", opacity: 1}));
  const plots = L.layerGroup(marks).addTo(map);

  // ---- names of the parcels: only where they fit, never one over the other, and off the plots if there is room ----
  const names = L.layerGroup().addTo(map);
  const pen = document.createElement("canvas").getContext("2d");
  const shapeOf = new Map();
  parcels.eachLayer((shape) => shapeOf.set(shape.feature.properties.i, shape));
  const largestFirst = data.parcels.map((_, i) => i).filter((i) => shapeOf.has(i) && data.parcels[i][4])
    .sort((a, b) => (data.parcels[b][3] || 0) - (data.parcels[a][3] || 0));
  const overlap = (a, b) => a.left < b.right && b.left < a.right && a.top < b.bottom && b.top < a.bottom;
  function discBoxes(view) {
    if (!map.hasLayer(plots)) return [];
    return marks.filter((mark) => view.contains(mark.getLatLng())).slice(0, MOST_DISCS).map((mark) => {
      const at = map.latLngToLayerPoint(mark.getLatLng()), r = mark.getRadius();
      return {left: at.x - r, right: at.x + r, top: at.y - r, bottom: at.y + r};
    });
  }
  function placeNames() {
    names.clearLayers();
    const box = document.getElementById("names-on");
    if (!box || !box.checked) return;
    pen.font = getComputedStyle(map.getContainer()).font.replace(/^[\s\S]*?[\d.]+px/, "600 " + NAME_PX + "px");
    const view = map.getBounds().pad(0.05), discs = discBoxes(view), taken = [];
    for (const i of largestFirst) {
      if (taken.length >= MOST_NAMES) break;
      const limits = shapeOf.get(i).getBounds();
      if (!view.intersects(limits)) continue;
      const room = map.latLngToLayerPoint(limits.getSouthEast()).subtract(map.latLngToLayerPoint(limits.getNorthWest()));
      const width = pen.measureText(data.parcels[i][0]).width + 6, height = NAME_PX + 4;
      if (width > NAME_SPILL * room.x || height > room.y) continue;
      const centre = map.latLngToLayerPoint(data.parcels[i][4]);
      const places = NAME_SHIFTS.filter((dy) => Math.abs(dy) < room.y / 3).map((dy) => {
        const spot = {left: centre.x - width / 2, right: centre.x + width / 2, top: centre.y + dy - height / 2, bottom: centre.y + dy + height / 2};
        return {...spot, dy: dy, hidden: discs.filter((disc) => overlap(disc, spot)).length};
      }).filter((spot) => !taken.some((other) => overlap(other, spot)));
      const best = places.sort((a, b) => a.hidden - b.hidden || Math.abs(a.dy) - Math.abs(b.dy))[0];
      if (!best) continue;
      taken.push(best);
      const icon = L.divIcon({className: "parcel-name", html: node("span", {text: data.parcels[i][0], "aria-hidden": "true"}), iconSize: [width, height], iconAnchor: [width / 2, height / 2 - best.dy]});
      names.addLayer(L.marker(data.parcels[i][4], {icon: icon, pane: "names", interactive: false, keyboard: false}));
    }
  }

  function addHatch() {
    const svg = map.getPane("overlayPane").querySelector("svg");
    if (!svg) return;
    svg.prepend(drawn("defs", {}, drawn("pattern", {id: "not-estimable", width: 8, height: 8, patternUnits: "userSpaceOnUse", patternTransform: "rotate(45)"},
      drawn("rect", {width: 8, height: 8, fill: "#e4e4e4"}), drawn("rect", {width: 2.5, height: 8, fill: "#9b9b9b"}))));
  }

  // ---- legend ----
  function key(picture, text) {
    return node("li", {}, picture, document.createTextNode(text));
  }
  function swatch(options) {
    return drawn("svg", {width: 26, height: 16, "aria-hidden": "true"}, drawn("rect", {x: 1, y: 1, width: 24, height: 14, stroke: "#2b332f", "stroke-width": 1, ...options}));
  }
  function disc(size, options) {
    const box = Math.max(16, Math.ceil(2 * size + 3));
    return drawn("svg", {width: 2 * LARGEST_PX + 3, height: box, "aria-hidden": "true"},
      drawn("circle", {cx: LARGEST_PX + 1.5, cy: box / 2, r: size, fill: "#fff", stroke: "#111", "stroke-width": 1.3, ...options}));
  }
  function classKeys() {
    const digits = Math.max(0, ...shown.edges.map((edge) => (String(edge).split(".")[1] || "").length));
    const limit = (edge) => (shown.kind === "change" && edge > 0 ? "+" : "") + figure(edge, digits);
    return shown.colours.map((fill, at) => key(swatch({fill: fill}), limit(shown.edges[at]) + " to " + limit(shown.edges[at + 1]))).reverse();
  }
  function parcelKeys() {
    const all = data.parcels.map((_, i) => i), keys = [];
    if (all.some((i) => spansZero(shown, i))) keys.push(key(swatch({fill: "none", "stroke-dasharray": "4 3", "stroke-width": 2}), data.interval + " includes zero"));
    if (all.some((i) => fromModel(shown, i))) keys.push(key(swatch({fill: "none", "stroke-dasharray": "1 4", "stroke-width": 2}), "no plots: level of the stratum"));
    if (all.some((i) => !known(shade(shown, i)))) keys.push(key(swatch({fill: HATCH}), "not estimable"));
    return keys;
  }
  function plotKeys() {
    const keys = [], at = surveyAt(shown);
    if (densest > 0) {
      const power = 10 ** Math.floor(Math.log10(densest)), top = Math.floor(densest / power) * power;
      for (const value of [top, top / 2, top / 10]) keys.push(key(disc(radius(value), {}), plain(value).replace(/\.0+$/, "") + " t C/ha"));
    }
    if (data.plots.some((plot, k) => plot.inside && !known(pool.density[k][at]))) keys.push(key(disc(absent(), {fill: "none", "stroke-dasharray": "2 2"}), "not measured then" + (data.pools.length > 1 && pool === data.pools[0] ? ", or not in all pools" : "")));
    const strays = data.plots.filter((plot) => !plot.inside).length;
    if (strays && data.parcels.length) keys.push(key(disc(absent(), {fill: "none", stroke: "#b3261e", "stroke-width": 2}), "outside all parcels: " + strays));
    return keys;
  }
  function totalLine() {
    const found = shown.total;
    const line = node("p", {class: "total"}, node("strong", {text: "Whole inventory: "}));
    if (!found || !known(found[0])) line.append("no total (see the notes below and stocks.csv)");
    else if (shown.kind === "density") line.append(estimate(found[D.density], found[D.densitySe], found[D.densityLow], found[D.densityHigh], "t C/ha"));
    else line.append(estimate(found[C.change], found[C.se], found[C.low], found[C.high], "t C", true) + "; " + dioxide(found));
    return line;
  }
  function countLines() {
    const n = data.counts, said = [], plots_ = (k) => k + " of " + n.plots + (n.plots === 1 ? " plot " : " plots ");
    if (n.outside && data.parcels.length) said.push(plots_(n.outside) + (n.outside === 1 ? "lies outside all parcels and is" : "lie outside all parcels and are") + " not counted (zoom out to those beyond the view).");
    if (n.unplaced && n.unplaced < n.plots) said.push(plots_(n.unplaced) + (n.unplaced === 1 ? "has no position and is" : "have no position and are") + " not drawn.");
    if (farOff) said.push(plots_(farOff) + (farOff === 1 ? "lies" : "lie") + " far from the others, beyond this view: are the coordinates right?");
    return said.map((text) => node("p", {class: "counted", text: text}));
  }
  function fillLegend() {
    const legend = document.getElementById("legend");
    const words = shown.kind === "density" ? "t C/ha, " + pool.name : "t C/ha per year, " + pool.name + "; + gained, \u2212 lost by the land";
    legend.replaceChildren(node("h2", {text: (shown.kind === "density" ? "Density " : "Change ") + shown.short}), node("p", {class: "unit", text: words}), node("ul", {class: "keys"}, ...classKeys(), ...parcelKeys()), totalLine(), ...countLines());
    if (data.plots.length && map.hasLayer(plots)) {
      legend.append(node("h2", {text: "Plots, survey " + data.surveys[surveyAt(shown)]}), node("ul", {class: "keys"}, ...plotKeys()));
    }
  }

  // ---- tables of the figures ----
  function fillTable(id, units, rows) {
    const details = document.getElementById(id);
    if (!details || !details.open) return;
    const density = shown.kind === "density";
    const columns = density
      ? [["density t C/ha", D.density, D.densitySe], ["SE", D.densitySe, D.densitySe], ["low", D.densityLow, D.densitySe], ["high", D.densityHigh, D.densitySe], ["stock t C", D.stock, D.stockSe], ["SE", D.stockSe, D.stockSe], ["plots", D.plots, null]]
      : [["change t C", C.change, C.se], ["SE", C.se, C.se], ["low", C.low, C.se], ["high", C.high, C.se], ["t C/yr", C.perYear, null], ["t C/ha per year", C.perHaYear, C.perHaYearSe], ["t CO\u2082/yr", C.co2, null], ["plots at both", C.paired, null]];
    const whole = density ? [D.plots] : [C.paired];
    const spreads = density ? [D.densitySe, D.densityLow, D.densityHigh, D.stockSe] : [C.se, C.low, C.high];
    const head = node("tr", {}, ...[units === "parcels" ? "parcel" : "stratum", "area ha", ...columns.map((column) => column[0]), "method"].map((text) => node("th", {text: text, scope: "col"})));
    const lines = rows.map(([name, area], i) => {
      const found = figuresOf(units, shown, i) || [];
      const alike = found[density ? D.densitySe : C.se] === 0; // no interval where the plots do not vary
      const cells = columns.map(([, at, spread]) => {
        const text = !known(found[at]) ? "" : alike && spreads.includes(at) ? "\u2013" : figure(found[at], whole.includes(at) ? 0 : decimalsFor(found[spread], found[at]));
        return node("td", {text: text});
      });
      const method = data.methods[found[density ? D.method : C.method]] || "not estimable";
      return node("tr", {}, node("td", {text: name}), node("td", {text: known(area) ? plain(area) : ""}), ...cells, node("td", {text: method + (alike ? "; no variation between plots" : ""), class: "text"}));
    });
    const caption = shown.title + ", " + pool.name;
    details.querySelector(".scroll").replaceChildren(node("table", {}, node("caption", {text: pool === data.pools[0] ? caption : shown.title, class: "unit"}), node("thead", {}, head), node("tbody", {}, ...lines)));
  }
  function fillTables() {
    fillTable("strata-figures", "strata", data.strata);
    fillTable("figures", "parcels", data.parcels.map(([name, , , area]) => [name, area]));
  }

  // ---- switching ----
  function drawPlots() {
    fitDiscs();
    marks.forEach((mark, at) => { const style = plotStyle(at); mark.setStyle(style); mark.setRadius(style.radius); });
  }
  function show(layer) {
    shown = layer;
    document.getElementById("layer-title").textContent = layer.title;
    parcels.setStyle(parcelStyle);
    drawPlots();
    parcels.eachLayer((shape) => {
      shape.closeTooltip();
      const element = shape.getElement();
      if (element) {
        element.setAttribute("tabindex", "0");
        element.setAttribute("role", "img");
        element.setAttribute("aria-label", parcelLabel(shape.feature.properties.i));
      }
    });
    fillLegend();
    fillTables();
  }
  function choosePool(name) {
    pool = data.pools.find((each) => each.pool === name);
    findDensest();
    show(pool.layers.find((layer) => layer.kind === shown.kind && layer.at === shown.at));
  }
  function choices(kind, title) {
    const group = data.pools[0].layers.filter((layer) => layer.kind === kind);
    if (!group.length) return [];
    const labels = group.map((layer) => {
      const input = node("input", {type: "radio", name: "layer", value: kind + " " + layer.at});
      input.checked = layer === shown;
      input.addEventListener("change", () => show(pool.layers.find((each) => each.kind === kind && each.at === layer.at)));
      return node("label", {}, input, node("span", {text: layer.short}));
    });
    return [node("fieldset", {}, node("legend", {text: title}), node("div", {class: "choices"}, ...labels))];
  }
  function poolChoice() {
    if (data.pools.length < 2) return data.pools_left_out ? [node("p", {class: "unit", text: "Only the sum of the pools is on this page, for its weight; stocks.csv and change.csv hold every pool."})] : [];
    const select = node("select", {id: "pool"}, ...data.pools.map((each) => node("option", {value: each.pool, text: each.name})));
    select.addEventListener("change", () => choosePool(select.value));
    return [node("label", {class: "pool"}, document.createTextNode("Pool "), select)];
  }
  function switchFor(id, text, act) {
    const box = node("input", {type: "checkbox", id: id, autocomplete: "off"});
    box.checked = true;
    box.addEventListener("change", () => act(box.checked));
    return node("label", {class: "switch"}, box, document.createTextNode(text));
  }
  function fillSwitches() {
    const form = document.getElementById("layers");
    form.append(...poolChoice(), ...choices("density", "Density at the survey"), ...choices("change", "Change between surveys"));
    if (data.plots.length) form.append(switchFor("plots-on", "Plots, sized by density", (on) => { if (on) plots.addTo(map); else plots.remove(); fillLegend(); placeNames(); }));
    if (largestFirst.length) form.append(switchFor("names-on", "Parcel names, where they fit", placeNames));
  }
  const fit = () => { if (bounds.isValid()) map.fitBounds(bounds, {padding: [24, 24], maxZoom: data.shapes.features.length ? CLOSEST_ZOOM : CLOSEST_ZOOM_PLOTS, animate: false}); };

  map.on("zoomend", () => { const before = largest; drawPlots(); if (largest !== before) fillLegend(); });
  map.on("moveend", placeNames);
  fit();
  addHatch();
  fillSwitches();
  if (shown) show(shown);
  fit(); // once more: the legend has set the height of the map
  placeNames();
  for (const id of ["figures", "strata-figures"]) {
    const details = document.getElementById(id);
    if (details) details.addEventListener("toggle", fillTables);
  }
  // The legend of another layer may be longer, and the map grows with it; the view follows until the reader moves it.
  let untouched = true;
  for (const event of ["pointerdown", "wheel", "keydown"]) map.getContainer().addEventListener(event, () => { untouched = false; }, {capture: true, passive: true});
  if (window.ResizeObserver) new ResizeObserver(() => { map.invalidateSize({pan: false}); if (untouched) fit(); }).observe(map.getContainer());
  return map;
}
