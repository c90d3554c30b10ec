// A chart that keeps zoom and selection while its data change.
// Plotly comes from the app's own static folder; nothing is fetched from elsewhere.
const SOURCE = "app/static/plotly.min.js";
const CONFIG = {
  displaylogo: false,
  responsive: true,
  showSendToCloud: false,
  modeBarButtonsToRemove: ["lasso2d", "autoScale2d", "toImage", "sendDataToCloud"],
  scrollZoom: false,
};

function loadPlotly() {
  if (window.Plotly) return Promise.resolve(window.Plotly);
  if (!window.kettlewatchPlotly) {
    window.kettlewatchPlotly = new Promise((resolve, reject) => {
      const script = document.createElement("script");
      script.src = SOURCE;
      script.onload = () => resolve(window.Plotly);
      script.onerror = () => reject(new Error("the chart library did not load"));
      document.head.appendChild(script);
    });
  }
  return window.kettlewatchPlotly;
}

export default function (component) {
  const { data, parentElement, setStateValue } = component;
  let box = parentElement.querySelector(".chart");
  if (!box) {
    box = document.createElement("div");
    box.className = "chart";
    box.setAttribute("role", "img");
    parentElement.appendChild(box);
  }
  box.setAttribute("aria-label", data.words);
  box.style.height = data.height + "px";
  const figure = JSON.parse(data.figure);
  figure.layout.uirevision = data.keep;
  figure.layout.height = data.height;
  loadPlotly().then((Plotly) => {
    const first = !box.dataset.ready;
    return Plotly.react(box, figure.data, figure.layout, CONFIG).then(() => {
      if (!first) return;
      box.dataset.ready = "1";
      box.on("plotly_relayout", (change) => {
        const low = change["xaxis.range[0]"], high = change["xaxis.range[1]"];
        if (low !== undefined) setStateValue("range", [low, high]);
        else if (change["xaxis.autorange"]) setStateValue("range", null);
      });
      box.on("plotly_selected", (event) => {
        if (!event || !event.points) return;
        const names = new Set(event.points.map((p) => p.customdata).filter(Boolean));
        setStateValue("selected", [...names]);
      });
      box.on("plotly_deselect", () => setStateValue("selected", []));
    });
  }).catch((error) => { box.textContent = String(error.message || error); });
  return () => {};
}
