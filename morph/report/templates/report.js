"use strict";
(function () {
  var root = document.documentElement;
  var place = document.getElementById("channels-3d");
  var figure = JSON.parse(document.getElementById("figure-data").textContent);
  var quantities = JSON.parse(document.getElementById("quantity-data").textContent);
  var views = {
    corner: { x: 1.75, y: 1.4, z: 0.65 },
    front: { x: 0, y: -1.9, z: 0.001 },
    side: { x: 1.9, y: 0, z: 0.001 },
    top: { x: 0, y: -0.001, z: 1.9 }
  };

  function decoded(text) {
    var bytes = Uint8Array.from(atob(text), function (c) { return c.charCodeAt(0); });
    return new Float32Array(bytes.buffer);
  }

  function words(value, unit) {
    return value.toFixed(unit === "deg" ? 0 : 2) + (unit === "deg" ? "°" : " " + unit);
  }

  function tellScale(quantity) {
    document.getElementById("scale-title").textContent = quantity.title + ":";
    document.getElementById("scale-ends").textContent =
      words(quantity.low, quantity.unit) + " to " + words(quantity.high, quantity.unit);
  }

  function show(name) {
    var quantity = quantities.find(function (item) { return item.name === name; });
    tellScale(quantity);
    document.querySelectorAll("button[data-quantity]").forEach(function (button) {
      button.setAttribute("aria-pressed", String(button.dataset.quantity === name));
    });
    return Plotly.restyle(place, {
      intensity: [decoded(quantity.values)],
      cmin: [quantity.low],
      cmax: [quantity.high],
      "colorbar.title.text": [quantity.unit]
    }, [0]).then(function () { root.dataset.shown = name; });
  }

  function eye() { return place.layout.scene.camera.eye; }

  function look(from) { return Plotly.relayout(place, { "scene.camera.eye": from }); }

  function turn(degrees) {
    var at = eye(), angle = degrees * Math.PI / 180;
    var c = Math.cos(angle), s = Math.sin(angle);
    return look({ x: c * at.x - s * at.y, y: s * at.x + c * at.y, z: at.z });
  }

  function zoom(factor) {
    var at = eye();
    return look({ x: factor * at.x, y: factor * at.y, z: factor * at.z });
  }

  function connect() {
    document.querySelectorAll("button[data-quantity]").forEach(function (button) {
      button.addEventListener("click", function () { show(button.dataset.quantity); });
    });
    document.querySelectorAll("button[data-view]").forEach(function (button) {
      button.addEventListener("click", function () { look(views[button.dataset.view]); });
    });
    document.querySelectorAll("button[data-turn]").forEach(function (button) {
      button.addEventListener("click", function () { turn(Number(button.dataset.turn)); });
    });
    document.querySelectorAll("button[data-zoom]").forEach(function (button) {
      button.addEventListener("click", function () { zoom(Number(button.dataset.zoom)); });
    });
  }

  function without3d() {
    place.hidden = true;
    document.getElementById("no-3d").hidden = false;
    root.dataset.state = "without-3d";
  }

  var folded = [];
  window.addEventListener("beforeprint", function () {
    folded = Array.from(document.querySelectorAll("details:not([open])"));
    folded.forEach(function (item) { item.open = true; });
  });
  window.addEventListener("afterprint", function () {
    folded.forEach(function (item) { item.open = false; });
  });

  tellScale(quantities[0]);
  root.dataset.shown = quantities[0].name;
  var canvas = document.createElement("canvas");
  if (!(canvas.getContext("webgl") || canvas.getContext("experimental-webgl"))) { without3d(); return; }
  var config = { displaylogo: false, responsive: true, displayModeBar: false, scrollZoom: true };
  Plotly.newPlot(place, figure.data, figure.layout, config).then(function () {
    connect();
    root.dataset.state = "ready";
  }).catch(without3d);
})();
