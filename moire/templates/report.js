(function () {
  "use strict";
  document.documentElement.classList.add("scripted");
  var wipe = document.querySelector(".wipe"), slider = document.querySelector("#wipe-range");
  function cut(share) {
    wipe.style.setProperty("--cut", share + "%");
    slider.setAttribute("aria-valuetext", share + " % before, " + (100 - share) + " % after");
  }
  if (wipe && slider) {
    slider.addEventListener("input", function () { cut(slider.value); });
    function drag(event) {
      var box = wipe.getBoundingClientRect();
      slider.value = Math.round(100 * (event.clientX - box.left) / box.width);
      cut(slider.value);
    }
    wipe.addEventListener("pointerdown", function (event) {
      wipe.setPointerCapture(event.pointerId);
      drag(event);
      wipe.addEventListener("pointermove", drag);
    });
    ["pointerup", "pointercancel"].forEach(function (name) {
      wipe.addEventListener(name, function () { wipe.removeEventListener("pointermove", drag); });
    });
  }
  document.querySelectorAll("input[name=zoom]").forEach(function (choice) {
    choice.addEventListener("change", function () {
      document.querySelector(".places").style.setProperty("--zoom", choice.value);
    });
  });
}());
