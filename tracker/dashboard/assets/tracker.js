/* The little that happens in the browser alone. */
(function () {
  "use strict";

  const renderers = (window.dashAgGridComponentFunctions =
    window.dashAgGridComponentFunctions || {});

  /* A unit's id, as the way to its page. */
  renderers.UnitLink = function (cell) {
    if (!cell.data) return "…";
    return window.React.createElement("a", { href: cell.data.href }, cell.value);
  };

  /* A hot spot: its figure on the colour scale, its meaning beside it. */
  renderers.HotSpot = function (cell) {
    if (!cell.data) return null;
    const create = window.React.createElement;
    const kind = cell.data.apart ? "heat-words apart" : "heat-words";
    const words = create("span", { className: kind, key: "words" }, cell.data.heat_words);
    if (cell.data.heat_step === null) return words;
    const shade = "heat heat-" + cell.data.heat_step;
    const figure = create("span", { className: shade, key: "figure" }, cell.value);
    return create("span", { className: "heat-mark" }, figure, words);
  };

  /* A press or Enter anywhere on a row opens its unit. */
  function openRow(event) {
    const row = event.target.closest && event.target.closest("#ranking-grid .ag-row");
    if (!row || event.target.closest("a")) return;
    if (event.type === "keydown" && event.key !== "Enter") return;
    if (!window.getSelection().isCollapsed) return; // somebody marks text to copy it
    const id = CSS.escape(row.getAttribute("row-id") || "");
    const link = document.querySelector('#ranking-grid .ag-row[row-id="' + id + '"] a');
    if (link) link.click();
  }
  document.addEventListener("click", openRow);
  document.addEventListener("keydown", openRow);

  const VIEW = "tracker-ranking-view";

  function setAddress(search) {
    window.history.replaceState(window.history.state, "", window.location.pathname + search);
  }

  window.dash_clientside = Object.assign({}, window.dash_clientside, {
    tracker: {
      /* Write the ranking's view into the address, and remember it for the way back. */
      keepAddress: function (query) {
        if (typeof query !== "string") return window.dash_clientside.no_update;
        const search = query ? "?" + query : "";
        setAddress(search);
        window.sessionStorage.setItem(VIEW, search);
        return window.dash_clientside.no_update;
      },
      /* Write the feeder whose doubts are shown into the address. */
      keepFeeder: function (feeder) {
        setAddress(feeder ? "?" + new URLSearchParams({ feeder: feeder }).toString() : "");
        return window.dash_clientside.no_update;
      },
      backToRanking: function () {
        return "." + (window.sessionStorage.getItem(VIEW) || "");
      },
      /* Dash names a tab by its page alone; several units are told apart by theirs. */
      nameTab: function (_head, unit) {
        if (unit) document.title = unit + " - tracker";
        return window.dash_clientside.no_update;
      },
      /* Show a stretch of the figure, and write its name into the address. */
      showSpan: function (span, ranges) {
        const query = new URLSearchParams(window.location.search);
        query.set("span", span);
        setAddress("?" + query.toString());
        const figure = document.querySelector("#unit-figure .js-plotly-plot");
        if (figure && ranges) {
          window.Plotly.relayout(figure, { "xaxis.range": ranges[span].slice() });
        }
        return window.dash_clientside.no_update;
      },
    },
  });
})();
