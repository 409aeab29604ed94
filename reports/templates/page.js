"use strict";
(function () {
  document.documentElement.classList.remove("nojs");
  var words = JSON.parse(document.getElementById("words").textContent);

  /* ---- figures: what a point says, under the pointer and by arrow keys ---- */
  function points(fig) {
    var drawn = Array.prototype.filter.call(fig.querySelectorAll("svg"), function (s) {
      return s.getClientRects().length > 0;
    });
    if (!drawn.length) return [];
    var ground = drawn[0].closest(".live") && drawn[0].querySelector(".background");
    var box = ground ? ground.getBoundingClientRect() : null;
    return Array.prototype.filter.call(drawn[0].querySelectorAll("[data-say],.mark-symbol path[aria-label]"), function (m) {
      var r = m.getBoundingClientRect(), x = r.left + r.width / 2;
      return !box || (x >= box.left && x <= box.right);
    }).sort(function (a, b) {
      return a.getBoundingClientRect().left - b.getBoundingClientRect().left;
    });
  }
  function words_of(mark) {
    return mark.getAttribute("data-say") || mark.getAttribute("aria-label");
  }
  function show(fig, mark) {
    hide(fig);
    if (!mark) return;
    mark.classList.add("on");
    var tip = document.createElement("div");
    tip.className = "tip";
    tip.setAttribute("aria-hidden", "true");
    tip.textContent = words_of(mark);
    fig.appendChild(tip);
    var box = fig.getBoundingClientRect(), at = mark.getBoundingClientRect();
    var left = at.left - box.left + at.width / 2 - tip.offsetWidth / 2;
    tip.style.left = Math.max(0, Math.min(left, box.width - tip.offsetWidth)) + "px";
    var top = at.top - box.top - tip.offsetHeight - 8;
    tip.style.top = (top < 0 ? at.bottom - box.top + 8 : top) + "px";
  }
  function hide(fig) {
    fig.querySelectorAll(".on").forEach(function (m) { m.classList.remove("on"); });
    fig.querySelectorAll(".tip").forEach(function (t) { t.remove(); });
  }
  function nearest(fig, event) {
    var best = null, least = 24 * 24;
    points(fig).forEach(function (mark) {
      var r = mark.getBoundingClientRect();
      var dx = r.left + r.width / 2 - event.clientX, dy = r.top + r.height / 2 - event.clientY;
      if (dx * dx + dy * dy < least) { least = dx * dx + dy * dy; best = mark; }
    });
    return best;
  }
  document.querySelectorAll(".fig").forEach(function (fig) {
    var at = -1, say = fig.parentNode.querySelector(".say");
    fig.addEventListener("pointermove", function (event) { show(fig, nearest(fig, event)); });
    fig.addEventListener("pointerdown", function (event) { show(fig, nearest(fig, event)); });
    fig.addEventListener("pointerleave", function () { hide(fig); });
    fig.addEventListener("blur", function () { hide(fig); if (say) say.textContent = ""; });
    fig.addEventListener("keydown", function (event) {
      var all = points(fig), step = { ArrowRight: 1, ArrowLeft: -1 }[event.key];
      if (event.key === "Home") at = 0;
      else if (event.key === "End") at = all.length - 1;
      else if (event.key === "Escape") { hide(fig); return; }
      else if (step) at = at < 0 ? (step > 0 ? 0 : all.length - 1) : Math.max(0, Math.min(all.length - 1, at + step));
      else return;
      if (!all.length) return;
      event.preventDefault();
      show(fig, all[at]);
      if (say) say.textContent = words_of(all[at]);
    });
  });

  /* ---- tables: sort, select, copy, download ---- */
  function raw(cell) {
    var value = cell.getAttribute("data-v");
    return value === null ? cell.textContent.trim() : value;
  }
  /* A text that a spreadsheet would take for a formula is marked as text. */
  var FORMULA = /^[\s\u200b-\u200f\u202a-\u202e\u2066-\u2069\ufeff]*[=+\-@\uff1d\uff0b\uff0d\uff20]|^[\t\r\n]/;
  function csvField(value, kind) {
    if (kind !== "n" && FORMULA.test(value)) value = "'" + value;
    return /[",\r\n']/.test(value) || kind !== "n" ? '"' + value.replace(/"/g, '""') + '"' : value;
  }
  function rowsOf(table) {
    var rows = Array.prototype.slice.call(table.tBodies[0].rows);
    var picked = rows.filter(function (r) { return r.classList.contains("picked"); });
    return picked.length ? picked : rows;
  }
  function grid(table, field, head) {
    var heads = Array.prototype.slice.call(table.tHead.rows[0].cells);
    var keep = heads.map(function (h, i) { return h.classList.contains("pick") ? -1 : i; })
      .filter(function (i) { return i >= 0; });
    var lines = [keep.map(function (i) { return head(heads[i].getAttribute("data-name") || heads[i].textContent.trim()); })];
    rowsOf(table).forEach(function (row) {
      lines.push(keep.map(function (i) { return field(raw(row.cells[i]), heads[i].getAttribute("data-k")); }));
    });
    return lines;
  }
  function csv(table) {
    return "\ufeff" + grid(table, csvField, function (h) { return csvField(h, "s"); })
      .map(function (l) { return l.join(","); }).join("\r\n") + "\r\n";
  }
  function tsv(table) {
    function clean(v, kind) {
      v = v.replace(/[\t\r\n]+/g, " ");
      return kind !== "n" && FORMULA.test(v) ? "'" + v : v;
    }
    return grid(table, clean, clean).map(function (l) { return l.join("\t"); }).join("\n");
  }
  function copy(text, done) {
    function byHand() {
      var area = document.createElement("textarea");
      area.value = text;
      document.body.appendChild(area);
      area.select();
      try { done(document.execCommand("copy")); } finally { area.remove(); }
    }
    if (navigator.clipboard && window.isSecureContext)
      navigator.clipboard.writeText(text).then(function () { done(true); }, byHand);
    else byHand();
  }
  function sortBy(table, column, th) {
    var down = th.getAttribute("aria-sort") === "ascending", kind = th.getAttribute("data-k");
    Array.prototype.forEach.call(table.tHead.rows[0].cells, function (h) {
      if (h.hasAttribute("aria-sort")) h.setAttribute("aria-sort", "none");
    });
    th.setAttribute("aria-sort", down ? "descending" : "ascending");
    var rows = Array.prototype.slice.call(table.tBodies[0].rows);
    var keyed = rows.map(function (row, i) { return { row: row, i: i, v: raw(row.cells[column]) }; });
    keyed.sort(function (a, b) {
      var order;
      if (kind === "n") {
        var x = parseFloat(a.v), y = parseFloat(b.v);
        if (isNaN(x) || isNaN(y)) return isNaN(x) - isNaN(y) || a.i - b.i;
        order = x - y;
      } else order = a.v < b.v ? -1 : a.v > b.v ? 1 : 0;
      return (down ? -order : order) || a.i - b.i;
    });
    keyed.forEach(function (k) { table.tBodies[0].appendChild(k.row); });
  }
  document.querySelectorAll("table[data-tools]").forEach(function (table) {
    Array.prototype.forEach.call(table.tHead.rows[0].cells, function (th, column) {
      var button = th.querySelector("button.sort");
      if (button) button.addEventListener("click", function () { sortBy(table, column, th); });
    });
    var tools = document.getElementById(table.id + "-tools");
    if (!tools) return;
    var status = tools.querySelector("[role=status]");
    function tally() {
      var n = table.tBodies[0].querySelectorAll("tr.picked").length;
      if (status) status.textContent = n ? words.picked.replace("{n}", n) : "";
    }
    table.addEventListener("change", function (event) {
      var box = event.target;
      if (box.type !== "checkbox") return;
      if (box.classList.contains("all"))
        table.tBodies[0].querySelectorAll("input[type=checkbox]").forEach(function (b) {
          b.checked = box.checked;
          b.closest("tr").classList.toggle("picked", box.checked);
        });
      else box.closest("tr").classList.toggle("picked", box.checked);
      tally();
    });
    tools.addEventListener("click", function (event) {
      var act = event.target.getAttribute("data-do");
      if (act === "copy") copy(tsv(table), function (ok) { status.textContent = ok ? words.copied : words.not_copied; });
      if (act === "list") {
        var lots = rowsOf(table).map(function (r) { return raw(r.querySelector("[data-list]")); });
        copy(lots.join("\n"), function (ok) { status.textContent = ok ? words.copied : words.not_copied; });
      }
      if (act === "csv") {
        var link = document.createElement("a");
        link.href = URL.createObjectURL(new Blob([csv(table)], { type: "text/csv;charset=utf-8" }));
        link.download = table.getAttribute("data-file") + ".csv";
        link.click();
        setTimeout(function () { URL.revokeObjectURL(link.href); }, 1000);
      }
    });
  });
})();
