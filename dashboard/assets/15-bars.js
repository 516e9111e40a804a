"use strict";
/* The bar of what is left: its length is the share left before the limit, the whisker its band. */

(() => {
  const { element } = window.throwline;

  const percent = (share) => `${Math.max(0, Math.min(100, share)).toFixed(1)}%`;

  function setLeftBar(bar, share, bandShare) {
    bar.classList.toggle("is-over", share <= 0);
    bar.querySelector(".left").style.width = percent(share);
    const whisker = bar.querySelector(".whisker");
    whisker.hidden = bandShare === null;
    if (bandShare === null) return;
    const low = Math.max(0, share - bandShare);
    whisker.style.left = percent(low);
    whisker.style.width = `${Math.max(0, Math.min(100, share + bandShare) - low).toFixed(1)}%`;
  }

  function leftBar(share, bandShare) {
    const bar = element("span", "left-bar");
    bar.setAttribute("aria-hidden", "true"); // the same number stands beside it as text
    bar.append(element("span", "left"), element("span", "whisker"));
    setLeftBar(bar, share, bandShare);
    return bar;
  }

  window.throwline.leftBar = leftBar;
  window.throwline.setLeftBar = setLeftBar;
})();
