(function () {
  "use strict";
  document.querySelectorAll("button[data-copies]").forEach(function (button) {
    var words = button.textContent;
    button.hidden = false;
    button.addEventListener("click", function () {
      var source = document.getElementById(button.dataset.copies);
      var text = source.textContent.trim().replace(/[ \t]*\n\s*/g, "\n");
      function done() {
        button.textContent = "Copied";
        setTimeout(function () { button.textContent = words; }, 2000);
      }
      function select() {
        var range = document.createRange();
        range.selectNodeContents(source);
        var selection = window.getSelection();
        selection.removeAllRanges();
        selection.addRange(range);
        button.textContent = "Selected: press Ctrl or ⌘ and C";
      }
      if (navigator.clipboard && window.isSecureContext) {
        navigator.clipboard.writeText(text).then(done, select);
      } else {
        select();
      }
    });
  });
  var closed = [];
  window.addEventListener("beforeprint", function () {
    closed = Array.from(document.querySelectorAll("details:not([open]):not(.data)"));
    closed.forEach(function (each) { each.open = true; });
  });
  window.addEventListener("afterprint", function () {
    closed.forEach(function (each) { each.open = false; });
  });
})();
