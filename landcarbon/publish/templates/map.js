// Draws the page from one table of figures. All text reaches the page as text nodes, never as markup.
function drawCarbonMap(place, data) {
  "use strict";
  const SVG = "http://www.w3.org/2000/svg";
  const HATCH = "url(#not-estimable)";
  const LARGEST_PX = 13, SMALLEST_LARGEST_PX = 3.5, SPACING_SHARE = data.parcels.length ? 0.25 : 0.42;
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
  const row = (layer, i) => (layer.kind === "density" ? data.stocks : data.changes)[layer.at][i];
  function shade(layer, i) {
    const found = row(layer, i);
    return found ? found[layer.kind === "density" ? D.density : C.perHaYear] : null;
  }
  function spansZero(layer, i) {
    const found = layer.kind === "change" ? row(layer, i) : null;
    return Boolean(found && known(found[C.low]) && found[C.low] <= 0 && found[C.high] >= 0);
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
  let shown = data.layers[0];

  function parcelStyle(feature) {
    const i = feature.properties.i, value = shade(shown, i), open = spansZero(shown, i);
    return {fill: true, fillOpacity: data.tiles ? 0.8 : 1, fillColor: known(value) ? colour(shown, value) : HATCH,
      color: "#2b332f", weight: open ? 2 : 1, dashArray: open ? "5 4" : null, opacity: 0.9};
  }
  const parcels = L.geoJSON(data.shapes, {
    style: parcelStyle,
    onEachFeature: (feature, layer) => {
      layer.bindTooltip(() => parcelTip(feature.properties.i), {sticky: true, className: "figures-tip", opacity: 1});
      layer.on({mouseover: () => layer.setStyle({weight: 3, dashArray: null}), mouseout: () => layer.setStyle(parcelStyle(feature))});
    },
  }).addTo(map);

  const bounds = L.latLngBounds([]);
  // A plot with a slipped coordinate may lie far off: where there are parcels, they alone set the view.
  if (data.shapes.features.length) bounds.extend(parcels.getBounds());
  else data.plots.forEach((plot) => bounds.extend(plot.at));

  // The size of a plot shows its density at the survey in view; of a change, at the later survey.
  const surveyAt = (layer) => (layer.kind === "density" ? layer.at : data.surveys.indexOf(data.pairs[layer.at][1]));
  const densest = Math.max(...data.plots.flatMap((plot) => plot.density.map((value) => value || 0)), 0);
  let largest = LARGEST_PX; // of the discs; less where many plots crowd the view, so that they do not hide the parcels
  const least = () => Math.min(2.5, largest / 2), absent = () => Math.min(3.5, largest);
  const radius = (density) => Math.max(least(), densest > 0 ? largest * Math.sqrt(Math.max(density, 0) / densest) : 0);
  function fitDiscs() {
    if (!data.plots.length || !bounds.isValid()) return;
    const size = map.project(bounds.getNorthWest()).subtract(map.project(bounds.getSouthEast()));
    const spacing = Math.sqrt(Math.abs(size.x * size.y) / data.plots.length);
    largest = Math.min(LARGEST_PX, Math.max(SMALLEST_LARGEST_PX, SPACING_SHARE * spacing));
  }
  function plotStyle(plot) {
    const density = plot.density[surveyAt(shown)];
    const base = {color: "#111", weight: largest < 6 ? 0.8 : 1.3, opacity: 1, fillColor: "#fff", fillOpacity: 0.8, dashArray: null};
    if (!plot.inside) return {...base, radius: absent(), color: "#b3261e", weight: 2, fillOpacity: 0};
    if (!known(density)) return {...base, radius: absent(), dashArray: "2 2", fillOpacity: 0};
    if (!data.parcels.length) return {...base, radius: radius(density), fillColor: colour(shown, density), fillOpacity: 1};
    return {...base, radius: radius(density)};
  }
  function plotTip(plot) {
    const under = [plot.parcel && "parcel " + plot.parcel, plot.stratum && "stratum " + plot.stratum, !plot.inside && "outside all parcels, not counted"];
    const pairs = data.surveys.map((survey, at) => ["Density " + survey, known(plot.density[at]) ? plain(plot.density[at]) + " t C/ha" : "not measured"]);
    return described("Plot " + plot.plot, under.filter(Boolean).join(" \u00b7 "), pairs);
  }
  const marks = data.plots.map((plot) => L.circleMarker(plot.at, {pane: "plots", ...plotStyle(plot)})
    .bindTooltip(() => plotTip(plot), {className: "figures-tip", opacity: 1}));
  const plots = L.layerGroup(marks).addTo(map);

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
    if (all.some((i) => !known(shade(shown, i)))) keys.push(key(swatch({fill: HATCH}), "not estimable"));
    return keys;
  }
  function plotKeys() {
    const keys = [], at = surveyAt(shown);
    if (densest > 0) {
      const power = 10 ** Math.floor(Math.log10(densest)), top = Math.floor(densest / power) * power;
      for (const value of [top, top / 2, top / 10]) keys.push(key(disc(radius(value), {}), plain(value).replace(/\.0+$/, "") + " t C/ha"));
    }
    if (data.plots.some((plot) => plot.inside && !known(plot.density[at]))) keys.push(key(disc(absent(), {fill: "none", "stroke-dasharray": "2 2"}), "not measured then"));
    const strays = data.plots.filter((plot) => !plot.inside).length;
    if (strays) keys.push(key(disc(absent(), {fill: "none", stroke: "#b3261e", "stroke-width": 2}), "outside all parcels: " + strays));
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
  function fillLegend() {
    const legend = document.getElementById("legend");
    const words = shown.kind === "density" ? "t C/ha, all counted pools" : "t C/ha per year; + gained, \u2212 lost by the land";
    legend.replaceChildren(node("h2", {text: (shown.kind === "density" ? "Density " : "Change ") + shown.short}), node("p", {class: "unit", text: words}), node("ul", {class: "keys"}, ...classKeys(), ...parcelKeys()), totalLine());
    if (data.plots.length && map.hasLayer(plots)) {
      legend.append(node("h2", {text: "Plots, survey " + data.surveys[surveyAt(shown)]}), node("ul", {class: "keys"}, ...plotKeys()));
    }
  }

  // ---- table of the figures ----
  function fillTable() {
    const details = document.getElementById("figures");
    if (!details || !details.open) return;
    const density = shown.kind === "density";
    const columns = density
      ? [["density t C/ha", D.density, D.densitySe], ["SE", D.densitySe, D.densitySe], ["low", D.densityLow, D.densitySe], ["high", D.densityHigh, D.densitySe], ["stock t C", D.stock, D.stockSe], ["SE", D.stockSe, D.stockSe], ["plots", D.plots, null]]
      : [["change t C", C.change, C.se], ["SE", C.se, C.se], ["low", C.low, C.se], ["high", C.high, C.se], ["t C/yr", C.perYear, null], ["t C/ha per year", C.perHaYear, C.perHaYearSe], ["t CO\u2082/yr", C.co2, null], ["plots at both", C.paired, null]];
    const whole = density ? [D.plots] : [C.paired];
    const head = node("tr", {}, ...["parcel", "area ha", ...columns.map((column) => column[0]), "method"].map((text) => node("th", {text: text, scope: "col"})));
    const rows = data.parcels.map(([name, , , area], i) => {
      const found = row(shown, i) || [];
      const cells = columns.map(([, at, spread]) => node("td", {text: known(found[at]) ? figure(found[at], whole.includes(at) ? 0 : decimalsFor(found[spread], found[at])) : ""}));
      const method = data.methods[found[density ? D.method : C.method]] || "not estimable";
      return node("tr", {}, node("td", {text: name}), node("td", {text: known(area) ? plain(area) : ""}), ...cells, node("td", {text: method, class: "text"}));
    });
    details.querySelector(".scroll").replaceChildren(node("table", {}, node("caption", {text: shown.title, class: "unit"}), node("thead", {}, head), node("tbody", {}, ...rows)));
  }

  // ---- switching ----
  function drawPlots() {
    fitDiscs();
    marks.forEach((mark, at) => { const style = plotStyle(data.plots[at]); mark.setStyle(style); mark.setRadius(style.radius); });
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
    fillTable();
  }
  function choices(kind, title) {
    const group = data.layers.filter((layer) => layer.kind === kind);
    if (!group.length) return [];
    const labels = group.map((layer) => {
      const input = node("input", {type: "radio", name: "layer", value: String(data.layers.indexOf(layer))});
      input.checked = layer === shown;
      input.addEventListener("change", () => show(layer));
      return node("label", {}, input, node("span", {text: layer.short}));
    });
    return [node("fieldset", {}, node("legend", {text: title}), node("div", {class: "choices"}, ...labels))];
  }
  function fillSwitches() {
    const form = document.getElementById("layers");
    form.append(...choices("density", "Density at the survey"), ...choices("change", "Change between surveys"));
    if (!data.plots.length) return;
    const box = node("input", {type: "checkbox", id: "plots-on"});
    box.checked = true;
    box.addEventListener("change", () => { if (box.checked) plots.addTo(map); else plots.remove(); fillLegend(); });
    form.append(node("label", {class: "switch"}, box, document.createTextNode("Plots, sized by density")));
  }

  if (bounds.isValid()) map.fitBounds(bounds, {padding: [24, 24], maxZoom: 18, animate: false});
  addHatch();
  fillSwitches();
  if (shown) show(shown);
  map.on("zoomend", () => { const before = largest; drawPlots(); if (largest !== before) fillLegend(); });
  const details = document.getElementById("figures");
  if (details) details.addEventListener("toggle", fillTable);
  // The legend of another layer may be longer, and the map grows with it.
  if (window.ResizeObserver) new ResizeObserver(() => map.invalidateSize({pan: false})).observe(map.getContainer());
  return map;
}
