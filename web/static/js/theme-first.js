// Runs before the first paint, so that a chosen theme never flashes the other one.
try {
  document.documentElement.dataset.theme = localStorage.getItem("crossdip.theme") ?? "auto";
} catch {
  document.documentElement.dataset.theme = "auto";
}
