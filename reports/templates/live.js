"use strict";
/* Zoom in time: the drawn charts stay until the first zoom, then live ones take their place. */
(function () {
  var source = document.getElementById("live");
  if (!source || !window.vegaEmbed) return;
  var live = JSON.parse(source.textContent), views = null, ready = null;
  var places = [], whole = [live.from, live.to], now = whole.slice();
  var status = document.getElementById("zoom-status");

  function plot(place) {
    return Math.max(120, place.clientWidth - live.margins);
  }
  window.addEventListener("resize", function () {
    places.forEach(function (place, i) { views[i].width(plot(place)).runAsync(); });
  });
  function start() {
    if (ready) return ready;
    views = [];
    ready = Promise.all(live.charts.map(function (chart) {
      var fig = document.getElementById(chart.id), place = document.createElement("div");
      place.className = "live";
      fig.appendChild(place);
      chart.spec.width = plot(place);
      return window.vegaEmbed(place, chart.spec, {
        mode: "vega-lite", renderer: "svg", actions: false, ast: true, tooltip: false, defaultStyle: false
      }).then(function (result) {
        Array.prototype.forEach.call(fig.children, function (child) {
          if (child !== place && !child.classList.contains("tip")) child.hidden = true;
        });
        views.push(result.view);
        places.push(place);
        drag(fig, place, result.view);
      });
    }));
    return ready;
  }
  function go(from, to) {
    var least = 3600000, most = whole[1] - whole[0];
    var span = Math.max(least, Math.min(most, to - from));
    var middle = Math.max(whole[0] + span / 2, Math.min(whole[1] - span / 2, (from + to) / 2));
    now = [middle - span / 2, middle + span / 2];
    return start().then(function () {
      return Promise.all(views.map(function (view) {
        return view.signal("from", now[0]).signal("to", now[1]).runAsync();
      }));
    }).then(function () {
      if (status) status.textContent = live.words.replace("{days}", ((now[1] - now[0]) / 86400000).toFixed(1));
    });
  }
  function by(factor, shift) {
    var middle = (now[0] + now[1]) / 2, half = (now[1] - now[0]) / 2;
    return go(middle + shift * half - half * factor, middle + shift * half + half * factor);
  }
  var acts = {
    closer: function () { return by(0.5, 0); },
    wider: function () { return by(2, 0); },
    earlier: function () { return by(1, -0.5); },
    later: function () { return by(1, 0.5); },
    onset: function () { return go(live.onset[0], live.onset[1]); },
    whole: function () { return go(whole[0], whole[1]); }
  };
  document.querySelectorAll(".zoom button").forEach(function (button) {
    button.addEventListener("click", function () { acts[button.getAttribute("data-zoom")](); });
  });
  function drag(fig, place, view) {
    var from = null, veil = null;
    function time(event) {
      var svg = place.querySelector("svg"), box = svg.getBoundingClientRect();
      var x = (event.clientX - box.left) * (svg.viewBox.baseVal.width / box.width) - view.origin()[0];
      return +view.scale("x").invert(x);
    }
    place.addEventListener("pointerdown", function (event) {
      if (event.pointerType !== "mouse" || event.button !== 0) return;
      from = { x: event.clientX, t: time(event) };
      place.setPointerCapture(event.pointerId);
      veil = document.createElement("div");
      veil.className = "veil";
      place.appendChild(veil);
    });
    place.addEventListener("pointermove", function (event) {
      if (!from) return;
      var box = place.getBoundingClientRect();
      veil.style.left = Math.min(from.x, event.clientX) - box.left + "px";
      veil.style.width = Math.abs(event.clientX - from.x) + "px";
    });
    place.addEventListener("pointerup", function (event) {
      if (!from) return;
      var begun = from;
      from = null;
      veil.remove();
      if (Math.abs(event.clientX - begun.x) > 8) go(Math.min(begun.t, time(event)), Math.max(begun.t, time(event)));
    });
    place.addEventListener("dblclick", function () { acts.whole(); });
  }
  document.querySelectorAll(".fig").forEach(function (fig) {
    fig.addEventListener("keydown", function (event) {
      var act = { "+": "closer", "=": "closer", "-": "wider", "0": "whole" }[event.key];
      if (act) { event.preventDefault(); acts[act](); }
    });
  });
  window.addEventListener("beforeprint", function () { if (views) acts.whole(); });
})();
