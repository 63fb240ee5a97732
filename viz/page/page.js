/* sources 8889f446fd57f5208d9a2feb3fcdfff3623bf2ca90843c37e79964a3e9248f70 */
/*
three 0.187.0

The MIT License

Copyright © 2010-2026 three.js authors

Permission is hereby granted, free of charge, to any person obtaining a copy
of this software and associated documentation files (the "Software"), to deal
in the Software without restriction, including without limitation the rights
to use, copy, modify, merge, publish, distribute, sublicense, and/or sell
copies of the Software, and to permit persons to whom the Software is
furnished to do so, subject to the following conditions:

The above copyright notice and this permission notice shall be included in
all copies or substantial portions of the Software.

THE SOFTWARE IS PROVIDED "AS IS", WITHOUT WARRANTY OF ANY KIND, EXPRESS OR
IMPLIED, INCLUDING BUT NOT LIMITED TO THE WARRANTIES OF MERCHANTABILITY,
FITNESS FOR A PARTICULAR PURPOSE AND NONINFRINGEMENT. IN NO EVENT SHALL THE
AUTHORS OR COPYRIGHT HOLDERS BE LIABLE FOR ANY CLAIM, DAMAGES OR OTHER
LIABILITY, WHETHER IN AN ACTION OF CONTRACT, TORT OR OTHERWISE, ARISING FROM,
OUT OF OR IN CONNECTION WITH THE SOFTWARE OR THE USE OR OTHER DEALINGS IN
THE SOFTWARE.

uplot 1.6.32

The MIT License (MIT)

Copyright (c) 2022 Leon Sorokin

Permission is hereby granted, free of charge, to any person obtaining a copy
of this software and associated documentation files (the "Software"), to deal
in the Software without restriction, including without limitation the rights
to use, copy, modify, merge, publish, distribute, sublicense, and/or sell
copies of the Software, and to permit persons to whom the Software is
furnished to do so, subject to the following conditions:

The above copyright notice and this permission notice shall be included in
all copies or substantial portions of the Software.

THE SOFTWARE IS PROVIDED "AS IS", WITHOUT WARRANTY OF ANY KIND, EXPRESS OR
IMPLIED, INCLUDING BUT NOT LIMITED TO THE WARRANTIES OF MERCHANTABILITY,
FITNESS FOR A PARTICULAR PURPOSE AND NONINFRINGEMENT. IN NO EVENT SHALL THE
AUTHORS OR COPYRIGHT HOLDERS BE LIABLE FOR ANY CLAIM, DAMAGES OR OTHER
LIABILITY, WHETHER IN AN ACTION OF CONTRACT, TORT OR OTHERWISE, ARISING FROM,
OUT OF OR IN CONNECTION WITH THE SOFTWARE OR THE USE OR OTHER DEALINGS IN
THE SOFTWARE.
*/
(()=>{var ga=class{constructor(t){this.time=t.time,this.rows=t.rows,this.row=0,this.first=0,this.last=Math.max(t.rows-1,0),this.markers=[],this.speed=1,this.playing=!1,this.listeners={row:[],stretch:[],markers:[],playing:[]}}on(t,e){this.listeners[t].push(e),e()}tell(t){for(let e of this.listeners[t])e()}show(t){let e=Math.min(Math.max(Math.round(t),0),this.rows-1);e!==this.row&&(this.row=e,(e<this.first||e>this.last)&&this.stretchAround(this.last-this.first),this.tell("row"))}pick(t){this.markers=t,this.tell("markers")}stretchAround(t){let e=Math.min(Math.max(Math.round(t),12),this.rows-1);this.first=Math.min(Math.max(this.row-Math.floor(e/2),0),this.rows-1-e),this.last=this.first+e,this.tell("stretch")}zoom(t){this.stretchAround((this.last-this.first)*t)}rowAt(t){let e=0,n=this.rows-1;for(;e<n;){let s=e+n>>1;this.time[s]<t?e=s+1:n=s}return e>0&&t-this.time[e-1]<this.time[e]-t?e-1:e}toggle(){if(this.playing=!this.playing,this.tell("playing"),!this.playing)return;this.row>=this.rows-1&&this.show(0);let t=performance.now(),e=this.time[this.row],n=s=>{if(this.playing){if(e+=(s-t)/1e3*this.speed,t=s,Math.abs(this.time[this.row]-e)>.5&&(e=this.time[this.row]),e>=this.time[this.rows-1]){this.show(this.rows-1),this.playing=!1,this.tell("playing");return}this.show(this.rowAt(e)),requestAnimationFrame(n)}};requestAnimationFrame(n)}};async function hf(i,t){let e=new Blob([eg(i)]).stream().pipeThrough(new DecompressionStream("gzip")),n=new Uint8Array(await new Response(e).arrayBuffer()),s={};for(let[r,o]of Object.entries(t))s[r]=ng(n,o);return s}function eg(i){if(Uint8Array.fromBase64)return Uint8Array.fromBase64(i);let t=atob(i),e=new Uint8Array(t.length);for(let n=0;n<t.length;n++)e[n]=t.charCodeAt(n);return e}function ng(i,{channels:t,length:e,step:n,order:s,width:r,start:o,at:a,missing:l}){let c=t*e,f=[];for(let u=0;u<t;u++){let h=new Float64Array(e),p=0,x=o[u];for(let w=0;w<e;w++){let m=u*e+w,d=0;for(let M=r-1;M>=0;M--)d=d*256+i[a+M*c+m];let v=d%2?-(d+1)/2:d/2;s===2?(p+=v,x+=p):x+=v;let C=l!==void 0&&i[l+(m>>3)]>>7-(m&7)&1;h[w]=C?NaN:x*n}f.push(h)}return f}async function uf(){let i=JSON.parse(document.getElementById("description").textContent),t=document.getElementById("numbers").textContent.trim(),e=await hf(t,i.arrays),n={...i,arrays:e,time:e.time[0],frame:e.frame[0]};n.rms=e.rms[0],n.rows=n.time.length;let s={deg:0,m:0};return n.columns=i.columns.map(r=>{let o=s[r.unit]++;return{...r,side:ig(r.name),value:e[`value ${r.unit}`][o],sd:e[`sd ${r.unit}`][o],atLimit:e[`at limit ${r.unit}`][o]}}),n.column=Object.fromEntries(n.columns.map(r=>[r.name,r])),n.used=i.reasons.indexOf(""),n}function ig(i){return/_right(?=_|$)/.test(i)?"right":/_left(?=_|$)/.test(i)?"left":"middle"}function dr(i,t,e,n=3){let s=[];for(let r=0;r<n;r++)s.push(i[t*n+r][e]);return s}function go(i,t){let e=-1;for(let n=0;n<i.markers.length;n++){let s=i.arrays.error[n][t];i.arrays.why_not[n][t]!==i.used||!(s>=0)||(e<0||s>i.arrays.error[e][t])&&(e=n)}return e}var _o=(i,t=1)=>Number.isFinite(i)?`${(1e3*i).toFixed(t)} mm`:"none";function Hc(i,t){if(!Number.isFinite(i))return"none";let e=t==="deg"?1:3,n=i.toFixed(e).replace(/^-(0\.0+)$/,"$1");return t==="deg"?`${n}\xB0`:`${n} m`}var ff=[],xe=i=>getComputedStyle(document.documentElement).getPropertyValue(`--${i}`).trim();function ps(i){ff.push(i)}var sg=()=>ff.forEach(i=>i());matchMedia("(prefers-color-scheme: dark)").addEventListener("change",sg);function Wc(i){let t=xe(i).slice(1);return[0,2,4].map(e=>parseInt(t.slice(e,e+2),16))}var pr=13,Kn=6,rg=24,og=.04,ag=5,_a=class{constructor(t,e,n,s,r){Object.assign(this,{trial:t,clock:e,canvas:n,told:s,order:r}),this.largest=t.arrays.error.map(o=>o.reduce((a,l)=>l>a?l:a,-1)),this.base=document.createElement("canvas"),r.addEventListener("change",()=>this.draw()),e.on("stretch",()=>this.draw()),e.on("markers",()=>this.draw()),e.on("row",()=>this.show()),ps(()=>this.draw()),new ResizeObserver(()=>this.draw()).observe(n.parentElement),this.#o()}#e(){let t=this.trial.markers.map((e,n)=>n).filter(e=>this.largest[e]>=0);return this.order.value==="worst"&&t.sort((e,n)=>this.largest[n]-this.largest[e]),t}draw(){this.markers=this.#e();let t=this.canvas.parentElement.clientWidth;if(!t)return;this.gutter=Math.min(Math.max(110,.16*t),170),this.wide=t-this.gutter-8,this.high=pr*this.markers.length;let e=Kn+this.high+rg,n=devicePixelRatio||1;for(let r of[this.canvas,this.base])r.width=Math.round(t*n),r.height=Math.round(e*n);this.canvas.style.width=`${t}px`,this.canvas.style.height=`${e}px`;let s=this.base.getContext("2d");s.scale(n,n),this.#t(s),this.#i(s,n),this.#n(s),this.#r(s),this.show()}#t(t){t.save(),t.fillStyle=xe("panel"),t.fillRect(this.gutter,Kn,this.wide,this.high),t.beginPath(),t.rect(this.gutter,Kn,this.wide,this.high),t.clip(),t.strokeStyle=xe("hatch"),t.lineWidth=1;for(let e=this.gutter-this.high;e<this.gutter+this.wide;e+=6)t.beginPath(),t.moveTo(e,Kn+this.high),t.lineTo(e+this.high,Kn),t.stroke();t.restore()}#i(t,e){let n=Math.max(Math.round(this.wide*e),1),s=new ImageData(n,Math.max(this.markers.length,1)),r=Array.from({length:ag},(u,h)=>Wc(`error-${h}`)),o=Wc("left-out"),{first:a,last:l}=this.clock,c=l-a+1;this.markers.forEach((u,h)=>{let p=this.trial.arrays.error[u],x=this.trial.arrays.why_not[u];for(let w=0;w<n;w++){let m=a+Math.floor(w*c/n),d=Math.max(m,a+Math.ceil((w+1)*c/n)-1),v=-1,C=!1;for(let M=m;M<=d;M++)p[M]>v&&(v=p[M]),p[M]>=0&&x[M]!==this.trial.used&&(C=!0);v<0||s.data.set([...C?o:lg(r,v/og),255],4*(h*n+w))}});let f=document.createElement("canvas");[f.width,f.height]=[s.width,s.height],f.getContext("2d").putImageData(s,0,0),t.imageSmoothingEnabled=!1,t.drawImage(f,this.gutter,Kn,this.wide,this.high),t.strokeStyle=xe("panel"),t.lineWidth=1;for(let u=1;u<this.markers.length;u++){let h=Kn+pr*u;t.strokeRect(this.gutter,h,this.wide,0)}}#n(t){t.textAlign="right",t.textBaseline="middle",this.markers.forEach((e,n)=>{let s=this.trial.markers[e],r=this.clock.markers.includes(s);t.font=`${r?"700 ":""}11px system-ui, sans-serif`,t.fillStyle=xe(r?"ink":"soft");let o=Kn+pr*(n+.5);t.fillText(s,this.gutter-6,o,this.gutter-8),r&&(t.strokeStyle=xe("ink"),t.lineWidth=1.5,t.strokeRect(this.gutter-1,o-pr/2,this.wide+2,pr))})}#r(t){let{time:e,first:n,last:s}=this.clock,r=e[s]-e[n]||1,o=cg(r/Math.max(2,this.wide/90));t.font="11px system-ui, sans-serif",t.fillStyle=xe("soft"),t.textAlign="center",t.textBaseline="top";for(let a=Math.ceil(e[n]/o)*o;a<=e[s]+1e-9;a+=o){let l=this.gutter+this.wide*(a-e[n])/r;t.fillRect(l-.5,Kn+this.high,1,4),t.fillText(`${Number(a.toFixed(3))} s`,Math.min(l,this.gutter+this.wide-12),Kn+this.high+7)}}show(){if(!this.markers||!this.base.width)return;let t=this.canvas.getContext("2d"),e=devicePixelRatio||1;t.setTransform(1,0,0,1,0,0),t.clearRect(0,0,this.canvas.width,this.canvas.height),t.drawImage(this.base,0,0),t.scale(e,e);let{first:n,last:s,row:r}=this.clock,o=this.gutter+this.wide*(r-n+.5)/(s-n+1);t.fillStyle=xe("panel"),t.fillRect(o-2.5,Kn-3,5,this.high+6),t.fillStyle=xe("ink"),t.fillRect(o-1,Kn-4,2,this.high+8)}#s(t){let e=this.canvas.getBoundingClientRect(),n=t.clientX-e.left-this.gutter,s=Math.floor((t.clientY-e.top-Kn)/pr),{first:r,last:o}=this.clock,a=r+Math.floor(n/this.wide*(o-r+1));return{marker:this.markers[Math.min(Math.max(s,0),this.markers.length-1)],row:Math.min(Math.max(a,r),o),inside:n>=0}}#o(){let t=({marker:n,row:s})=>{let{arrays:r,markers:o,time:a,frame:l,reasons:c,used:f}=this.trial,u=r.why_not[n][s],h=u===f?"":`, ${c[u].replaceAll("_"," ")}`,p=r.error[n][s],x=Number.isFinite(p)?_o(p):"no error";this.told.textContent=`${o[n]} at ${a[s].toFixed(2)} s (frame ${l[s]}): ${x}${h}`},e=n=>{let s=this.#s(n);return t(s),s.inside&&this.clock.show(s.row),s};this.canvas.addEventListener("pointerdown",n=>{this.canvas.setPointerCapture(n.pointerId),this.clock.pick([this.trial.markers[e(n).marker]])}),this.canvas.addEventListener("pointermove",n=>{n.buttons?e(n):t(this.#s(n))})}};function lg(i,t){let e=Math.min(Math.max(t,0),1)*(i.length-1),n=Math.min(Math.floor(e),i.length-2);return i[n].map((s,r)=>Math.round(s+(i[n+1][r]-s)*(e-n)))}function cg(i){let t=10**Math.floor(Math.log10(i));return[1,2,5,10].map(e=>e*t).find(e=>e>=.999*i)}var hg="uplot",ug="u-hz",fg="u-vt",dg="u-title",pg="u-wrap",mg="u-under",gg="u-over",_g="u-axis",Bs="u-off",xg="u-select",yg="u-cursor-x",vg="u-cursor-y",Sg="u-cursor-pt",Mg="u-legend",bg="u-live",wg="u-inline",Eg="u-series",Tg="u-marker",df="u-label",Ag="u-value",yo="width",vo="height";var pf="bottom",mr="left",Xc="right",lh="#000",mf=lh+"0",qc="mousemove",gf="mousedown",Yc="mouseup",_f="mouseenter",xf="mouseleave",yf="dblclick",Rg="resize",Cg="scroll",vf="change",Ma="dppxchange",ch="--",Mr=typeof window<"u",jc=Mr?document:null,_r=Mr?window:null,Pg=Mr?navigator:null,be,xa;function Qc(){let i=devicePixelRatio;be!=i&&(be=i,xa&&eh(vf,xa,Qc),xa=matchMedia(`(min-resolution: ${be-.001}dppx) and (max-resolution: ${be+.001}dppx)`),ks(vf,xa,Qc),_r.dispatchEvent(new CustomEvent(Ma)))}function jn(i,t){if(t!=null){let e=i.classList;!e.contains(t)&&e.add(t)}}function th(i,t){let e=i.classList;e.contains(t)&&e.remove(t)}function Ve(i,t,e){i.style[t]=e+"px"}function vi(i,t,e,n){let s=jc.createElement(i);return t!=null&&jn(s,t),e?.insertBefore(s,n),s}function li(i,t){return vi("div",i,t)}var Sf=new WeakMap;function Oi(i,t,e,n,s){let r="translate("+t+"px,"+e+"px)",o=Sf.get(i);r!=o&&(i.style.transform=r,Sf.set(i,r),t<0||e<0||t>n||e>s?jn(i,Bs):th(i,Bs))}var Mf=new WeakMap;function bf(i,t,e){let n=t+e,s=Mf.get(i);n!=s&&(Mf.set(i,n),i.style.background=t,i.style.borderColor=e)}var wf=new WeakMap;function Ef(i,t,e,n){let s=t+""+e,r=wf.get(i);s!=r&&(wf.set(i,s),i.style.height=e+"px",i.style.width=t+"px",i.style.marginLeft=n?-t/2+"px":0,i.style.marginTop=n?-e/2+"px":0)}var hh={passive:!0},Ig={...hh,capture:!0};function ks(i,t,e,n){t.addEventListener(i,e,n?Ig:hh)}function eh(i,t,e,n){t.removeEventListener(i,e,hh)}Mr&&Qc();function Si(i,t,e,n){let s;e=e||0,n=n||t.length-1;let r=n<=2147483647;for(;n-e>1;)s=r?e+n>>1:Qn((e+n)/2),t[s]<i?e=s:n=s;return i-t[e]<=t[n]-i?e:n}function Qf(i){return(e,n,s)=>{let r=-1,o=-1;for(let a=n;a<=s;a++)if(i(e[a])){r=a;break}for(let a=s;a>=n;a--)if(i(e[a])){o=a;break}return[r,o]}}var td=i=>i!=null,ed=i=>i!=null&&i>0,Ea=Qf(td),Lg=Qf(ed);function Dg(i,t,e,n=0,s=!1){let r=s?Lg:Ea,o=s?ed:td;[t,e]=r(i,t,e);let a=i[t],l=i[t];if(t>-1)if(n==1)a=i[t],l=i[e];else if(n==-1)a=i[e],l=i[t];else for(let c=t;c<=e;c++){let f=i[c];o(f)&&(f<a?a=f:f>l&&(l=f))}return[a??De,l??-De]}function Ta(i,t,e,n){let s=Rf(i),r=Rf(t);i==t&&(s==-1?(i*=e,t/=e):(i/=e,t*=e));let o=e==10?Zi:nd,a=s==1?Qn:ci,l=r==1?ci:Qn,c=a(o(fn(i))),f=l(o(fn(t))),u=xr(e,c),h=xr(e,f);return e==10&&(c<0&&(u=Ne(u,-c)),f<0&&(h=Ne(h,-f))),n||e==2?(i=u*s,t=h*r):(i=od(i,u),t=Aa(t,h)),[i,t]}function uh(i,t,e,n){let s=Ta(i,t,e,n);return i==0&&(s[0]=0),t==0&&(s[1]=0),s}var fh=.1,Tf={mode:3,pad:fh},Mo={pad:0,soft:null,mode:0},Ng={min:Mo,max:Mo};function ba(i,t,e,n){return Ra(e)?Af(i,t,e):(Mo.pad=e,Mo.soft=n?0:null,Mo.mode=n?3:0,Af(i,t,Ng))}function ve(i,t){return i??t}function Ug(i,t,e){for(t=ve(t,0),e=ve(e,i.length-1);t<=e;){if(i[t]!=null)return!0;t++}return!1}function Af(i,t,e){let n=e.min,s=e.max,r=ve(n.pad,0),o=ve(s.pad,0),a=ve(n.hard,-De),l=ve(s.hard,De),c=ve(n.soft,De),f=ve(s.soft,-De),u=ve(n.mode,0),h=ve(s.mode,0),p=t-i,x=Zi(p),w=Bn(fn(i),fn(t)),m=Zi(w),d=fn(m-x);(p<1e-24||d>10)&&(p=0,(i==0||t==0)&&(p=1e-24,u==2&&c!=De&&(r=0),h==2&&f!=-De&&(o=0)));let v=p||w||1e3,C=Zi(v),M=xr(10,Qn(C)),P=v*(p==0?i==0?.1:1:r),T=Ne(od(i-P,M/10),24),_=i>=c&&(u==1||u==3&&T<=c||u==2&&T>=c)?c:De,E=Bn(a,T<_&&i>=_?_:Mi(_,T)),B=v*(p==0?t==0?.1:1:o),N=Ne(Aa(t+B,M/10),24),D=t<=f&&(h==1||h==3&&N>=f||h==2&&N<=f)?f:-De,k=Mi(l,N>D&&t<=D?D:Bn(D,N));return E==k&&E==0&&(k=100),[E,k]}var Fg=new Intl.NumberFormat(Mr?Pg.language:"en-US"),dh=i=>Fg.format(i),ti=Math,Sa=ti.PI,fn=ti.abs,Qn=ti.floor,un=ti.round,ci=ti.ceil,Mi=ti.min,Bn=ti.max,xr=ti.pow,Rf=ti.sign,Zi=ti.log10,nd=ti.log2,Og=(i,t=1)=>ti.sinh(i)*t,Zc=(i,t=1)=>ti.asinh(i/t),De=1/0;function Cf(i){return(Zi((i^i>>31)-(i>>31))|0)+1}function nh(i,t,e){return Mi(Bn(i,t),e)}function id(i){return typeof i=="function"}function me(i){return id(i)?i:()=>i}var Bg=()=>{},sd=i=>i,rd=(i,t)=>t,kg=i=>null,Pf=i=>!0,If=(i,t)=>i==t,zg=/\.\d*?(?=9{6,}|0{6,})/gm,zs=i=>{if(ld(i)||gs.has(i))return i;let t=`${i}`,e=t.match(zg);if(e==null)return i;let n=e[0].length-1;if(t.indexOf("e-")!=-1){let[s,r]=t.split("e");return+`${zs(s)}e${r}`}return Ne(i,n)};function Fs(i,t){return zs(Ne(zs(i/t))*t)}function Aa(i,t){return zs(ci(zs(i/t))*t)}function od(i,t){return zs(Qn(zs(i/t))*t)}function Ne(i,t=0){if(ld(i))return i;let e=10**t,n=i*e*(1+Number.EPSILON);return un(n)/e}var gs=new Map;function ad(i){return((""+i).split(".")[1]||"").length}function wo(i,t,e,n){let s=[],r=n.map(ad);for(let o=t;o<e;o++){let a=fn(o),l=Ne(xr(i,o),a);for(let c=0;c<n.length;c++){let f=i==10?+`${n[c]}e${o}`:n[c]*l,u=(o>=0?0:a)+(o>=r[c]?0:r[c]),h=i==10?f:Ne(f,u);s.push(h),gs.set(h,u)}}return s}var bo={},ph=[],yr=[null,null],ms=Array.isArray,ld=Number.isInteger,Vg=i=>i===void 0;function Lf(i){return typeof i=="string"}function Ra(i){let t=!1;if(i!=null){let e=i.constructor;t=e==null||e==Object}return t}function Gg(i){return i!=null&&typeof i=="object"}var Hg=Object.getPrototypeOf(Uint8Array),cd="__proto__";function vr(i,t=Ra){let e;if(ms(i)){let n=i.find(s=>s!=null);if(ms(n)||t(n)){e=Array(i.length);for(let s=0;s<i.length;s++)e[s]=vr(i[s],t)}else e=i.slice()}else if(i instanceof Hg)e=i.slice();else if(t(i)){e={};for(let n in i)n!=cd&&(e[n]=vr(i[n],t))}else e=i;return e}function an(i){let t=arguments;for(let e=1;e<t.length;e++){let n=t[e];for(let s in n)s!=cd&&(Ra(i[s])?an(i[s],vr(n[s])):i[s]=vr(n[s]))}return i}var Wg=0,Xg=1,qg=2;function Yg(i,t,e){for(let n=0,s,r=-1;n<t.length;n++){let o=t[n];if(o>r){for(s=o-1;s>=0&&i[s]==null;)i[s--]=null;for(s=o+1;s<e&&i[s]==null;)i[r=s++]=null}}}function Zg(i,t){if(Kg(i)){let o=i[0].slice();for(let a=1;a<i.length;a++)o.push(...i[a].slice(1));return jg(o[0])||(o=Jg(o)),o}let e=new Set;for(let o=0;o<i.length;o++){let l=i[o][0],c=l.length;for(let f=0;f<c;f++)e.add(l[f])}let n=[Array.from(e).sort((o,a)=>o-a)],s=n[0].length,r=new Map;for(let o=0;o<s;o++)r.set(n[0][o],o);for(let o=0;o<i.length;o++){let a=i[o],l=a[0];for(let c=1;c<a.length;c++){let f=a[c],u=Array(s).fill(void 0),h=t?t[o][c]:Xg,p=[];for(let x=0;x<f.length;x++){let w=f[x],m=r.get(l[x]);w===null?h!=Wg&&(u[m]=w,h==qg&&p.push(m)):u[m]=w}Yg(u,p,s),n.push(u)}}return n}var $g=typeof queueMicrotask>"u"?i=>Promise.resolve().then(i):queueMicrotask;function Jg(i){let t=i[0],e=t.length,n=Array(e);for(let r=0;r<n.length;r++)n[r]=r;n.sort((r,o)=>t[r]-t[o]);let s=[];for(let r=0;r<i.length;r++){let o=i[r],a=Array(e);for(let l=0;l<e;l++)a[l]=o[n[l]];s.push(a)}return s}function Kg(i){let t=i[0][0],e=t.length;for(let n=1;n<i.length;n++){let s=i[n][0];if(s.length!=e)return!1;if(s!=t){for(let r=0;r<e;r++)if(s[r]!=t[r])return!1}}return!0}function jg(i,t=100){let e=i.length;if(e<=1)return!0;let n=0,s=e-1;for(;n<=s&&i[n]==null;)n++;for(;s>=n&&i[s]==null;)s--;if(s<=n)return!0;let r=Bn(1,Qn((s-n+1)/t));for(let o=i[n],a=n+r;a<=s;a+=r){let l=i[a];if(l!=null){if(l<=o)return!1;o=l}}return!0}var hd=["January","February","March","April","May","June","July","August","September","October","November","December"],ud=["Sunday","Monday","Tuesday","Wednesday","Thursday","Friday","Saturday"];function fd(i){return i.slice(0,3)}var Qg=ud.map(fd),t0=hd.map(fd),e0={MMMM:hd,MMM:t0,WWWW:ud,WWW:Qg};function xo(i){return(i<10?"0":"")+i}function n0(i){return(i<10?"00":i<100?"0":"")+i}var i0={YYYY:i=>i.getFullYear(),YY:i=>(i.getFullYear()+"").slice(2),MMMM:(i,t)=>t.MMMM[i.getMonth()],MMM:(i,t)=>t.MMM[i.getMonth()],MM:i=>xo(i.getMonth()+1),M:i=>i.getMonth()+1,DD:i=>xo(i.getDate()),D:i=>i.getDate(),WWWW:(i,t)=>t.WWWW[i.getDay()],WWW:(i,t)=>t.WWW[i.getDay()],HH:i=>xo(i.getHours()),H:i=>i.getHours(),h:i=>{let t=i.getHours();return t==0?12:t>12?t-12:t},AA:i=>i.getHours()>=12?"PM":"AM",aa:i=>i.getHours()>=12?"pm":"am",a:i=>i.getHours()>=12?"p":"a",mm:i=>xo(i.getMinutes()),m:i=>i.getMinutes(),ss:i=>xo(i.getSeconds()),s:i=>i.getSeconds(),fff:i=>n0(i.getMilliseconds())};function mh(i,t){t=t||e0;let e=[],n=/\{([a-z]+)\}|[^{]+/gi,s;for(;s=n.exec(i);)e.push(s[0][0]=="{"?i0[s[1]]:s[0]);return r=>{let o="";for(let a=0;a<e.length;a++)o+=typeof e[a]=="string"?e[a]:e[a](r,t);return o}}var s0=new Intl.DateTimeFormat().resolvedOptions().timeZone;function r0(i,t){let e;return t=="UTC"||t=="Etc/UTC"?e=new Date(+i+i.getTimezoneOffset()*6e4):t==s0?e=i:(e=new Date(i.toLocaleString("en-US",{timeZone:t})),e.setMilliseconds(i.getMilliseconds())),e}var dd=i=>i%1==0,wa=[1,2,2.5,5],o0=wo(10,-32,0,wa),pd=wo(10,0,32,wa),a0=pd.filter(dd),Os=o0.concat(pd),gh=`
`,md="{YYYY}",Df=gh+md,gd="{M}/{D}",So=gh+gd,ya=So+"/{YY}",_d="{aa}",l0="{h}:{mm}",gr=l0+_d,Nf=gh+gr,Uf=":{ss}",Ee=null;function xd(i){let t=i*1e3,e=t*60,n=e*60,s=n*24,r=s*30,o=s*365,l=(i==1?wo(10,0,3,wa).filter(dd):wo(10,-3,0,wa)).concat([t,t*5,t*10,t*15,t*30,e,e*5,e*10,e*15,e*30,n,n*2,n*3,n*4,n*6,n*8,n*12,s,s*2,s*3,s*4,s*5,s*6,s*7,s*8,s*9,s*10,s*15,r,r*2,r*3,r*4,r*6,o,o*2,o*5,o*10,o*25,o*50,o*100]),c=[[o,md,Ee,Ee,Ee,Ee,Ee,Ee,1],[s*28,"{MMM}",Df,Ee,Ee,Ee,Ee,Ee,1],[s,gd,Df,Ee,Ee,Ee,Ee,Ee,1],[n,"{h}"+_d,ya,Ee,So,Ee,Ee,Ee,1],[e,gr,ya,Ee,So,Ee,Ee,Ee,1],[t,Uf,ya+" "+gr,Ee,So+" "+gr,Ee,Nf,Ee,1],[i,Uf+".{fff}",ya+" "+gr,Ee,So+" "+gr,Ee,Nf,Ee,1]];function f(u){return(h,p,x,w,m,d)=>{let v=[],C=m>=o,M=m>=r&&m<o,P=u(x),T=Ne(P*i,3),_=$c(P.getFullYear(),C?0:P.getMonth(),M||C?1:P.getDate()),E=Ne(_*i,3);if(M||C){let B=M?m/r:0,N=C?m/o:0,D=T==E?T:Ne($c(_.getFullYear()+N,_.getMonth()+B,1)*i,3),k=new Date(un(D/i)),G=k.getFullYear(),L=k.getMonth();for(let H=0;D<=w;H++){let Y=$c(G+N*H,L+B*H,1),V=Y-u(Ne(Y*i,3));D=Ne((+Y+V)*i,3),D<=w&&v.push(D)}}else{let B=m>=s?s:m,N=Qn(x)-Qn(T),D=E+N+Aa(T-E,B);v.push(D);let k=u(D),G=k.getHours()+k.getMinutes()/e+k.getSeconds()/n,L=m/n,H=h.axes[p]._space,Y=d/H;for(;D=Ne(D+m,i==1?0:3),!(D>w);)if(L>1){let V=Qn(Ne(G+L,6))%24,j=u(D).getHours()-V;j>1&&(j=-1),D-=j*n,G=(G+L)%24;let it=v[v.length-1];Ne((D-it)/m,3)*Y>=.7&&v.push(D)}else v.push(D)}return v}}return[l,c,f]}var[c0,h0,u0]=xd(1),[f0,d0,p0]=xd(.001);wo(2,-53,53,[1]);function Ff(i,t){return i.map(e=>e.map((n,s)=>s==0||s==8||n==null?n:t(s==1||e[8]==0?n:e[1]+n)))}function Of(i,t){return(e,n,s,r,o)=>{let a=t.find(x=>o>=x[0])||t[t.length-1],l,c,f,u,h,p;return n.map(x=>{let w=i(x),m=w.getFullYear(),d=w.getMonth(),v=w.getDate(),C=w.getHours(),M=w.getMinutes(),P=w.getSeconds(),T=m!=l&&a[2]||d!=c&&a[3]||v!=f&&a[4]||C!=u&&a[5]||M!=h&&a[6]||P!=p&&a[7]||a[1];return l=m,c=d,f=v,u=C,h=M,p=P,T(w)})}}function m0(i,t){let e=mh(t);return(n,s,r,o,a)=>s.map(l=>e(i(l)))}function $c(i,t,e){return new Date(i,t,e)}function Bf(i,t){return t(i)}var g0="{YYYY}-{MM}-{DD} {h}:{mm}{aa}";function kf(i,t){return(e,n,s,r)=>r==null?ch:t(i(n))}function _0(i,t){let e=i.series[t];return e.width?e.stroke(i,t):e.points.width?e.points.stroke(i,t):null}function x0(i,t){return i.series[t].fill(i,t)}var y0={show:!0,live:!0,isolate:!1,mount:Bg,markers:{show:!0,width:2,stroke:_0,fill:x0,dash:"solid"},idx:null,idxs:null,values:[]};function v0(i,t){let e=i.cursor.points,n=li(),s=e.size(i,t);Ve(n,yo,s),Ve(n,vo,s);let r=s/-2;Ve(n,"marginLeft",r),Ve(n,"marginTop",r);let o=e.width(i,t,s);return o&&Ve(n,"borderWidth",o),n}function S0(i,t){let e=i.series[t].points;return e._fill||e._stroke}function M0(i,t){let e=i.series[t].points;return e._stroke||e._fill}function b0(i,t){return i.series[t].points.size}var Jc=[0,0];function w0(i,t,e){return Jc[0]=t,Jc[1]=e,Jc}function va(i,t,e,n=!0){return s=>{s.button==0&&(!n||s.target==t)&&e(s)}}function Kc(i,t,e,n=!0){return s=>{(!n||s.target==t)&&e(s)}}var E0={show:!0,x:!0,y:!0,lock:!1,move:w0,points:{one:!1,show:v0,size:b0,width:0,stroke:M0,fill:S0},bind:{mousedown:va,mouseup:va,click:va,dblclick:va,mousemove:Kc,mouseleave:Kc,mouseenter:Kc},drag:{setScale:!0,x:!0,y:!1,dist:0,uni:null,click:(i,t)=>{t.stopPropagation(),t.stopImmediatePropagation()},_x:!1,_y:!1},focus:{dist:(i,t,e,n,s)=>n-s,prox:-1,bias:0},hover:{skip:[void 0],prox:null,bias:0},left:-10,top:-10,idx:null,dataIdx:null,idxs:null,event:null},yd={show:!0,stroke:"rgba(0,0,0,0.07)",width:2},_h=an({},yd,{filter:rd}),vd=an({},_h,{size:10}),Sd=an({},yd,{show:!1}),xh='12px system-ui, -apple-system, "Segoe UI", Roboto, "Helvetica Neue", Arial, "Noto Sans", sans-serif, "Apple Color Emoji", "Segoe UI Emoji", "Segoe UI Symbol", "Noto Color Emoji"',Md="bold "+xh,bd=1.5,zf={show:!0,scale:"x",stroke:lh,space:50,gap:5,alignTo:1,size:50,labelGap:0,labelSize:30,labelFont:Md,side:2,grid:_h,ticks:vd,border:Sd,font:xh,lineGap:bd,rotate:0},T0="Value",A0="Time",Vf={show:!0,scale:"x",auto:!1,sorted:1,min:De,max:-De,idxs:[]};function R0(i,t,e,n,s){return t.map(r=>r==null?"":dh(r))}function C0(i,t,e,n,s,r,o){let a=[],l=gs.get(s)||0;e=o?e:Ne(Aa(e,s),l);for(let c=e;c<=n;c=Ne(c+s,l))a.push(Object.is(c,-0)?0:c);return a}function ih(i,t,e,n,s,r,o){let a=[],l=i.scales[i.axes[t].scale].log,c=l==10?Zi:nd,f=Qn(c(e));s=xr(l,f),l==10&&(s=Os[Si(s,Os)]);let u=e,h=s*l;l==10&&(h=Os[Si(h,Os)]);do a.push(u),u=u+s,l==10&&!gs.has(u)&&(u=Ne(u,gs.get(s))),u>=h&&(s=u,h=s*l,l==10&&(h=Os[Si(h,Os)]));while(u<=n);return a}function P0(i,t,e,n,s,r,o){let l=i.scales[i.axes[t].scale].asinh,c=n>l?ih(i,t,Bn(l,e),n,s):[l],f=n>=0&&e<=0?[0]:[];return(e<-l?ih(i,t,Bn(l,-n),-e,s):[l]).reverse().map(h=>-h).concat(f,c)}var wd=/./,I0=/[12357]/,L0=/[125]/,Gf=/1/,sh=(i,t,e,n)=>i.map((s,r)=>t==4&&s==0||r%n==0&&e.test(s.toExponential()[s<0?1:0])?s:null);function D0(i,t,e,n,s){let r=i.axes[e],o=r.scale,a=i.scales[o],l=i.valToPos,c=r._space,f=l(10,o),u=l(9,o)-f>=c?wd:l(7,o)-f>=c?I0:l(5,o)-f>=c?L0:Gf;if(u==Gf){let h=fn(l(1,o)-f);if(h<c)return sh(t.slice().reverse(),a.distr,u,ci(c/h)).reverse()}return sh(t,a.distr,u,1)}function N0(i,t,e,n,s){let r=i.axes[e],o=r.scale,a=r._space,l=i.valToPos,c=fn(l(1,o)-l(2,o));return c<a?sh(t.slice().reverse(),3,wd,ci(a/c)).reverse():t}function U0(i,t,e,n){return n==null?ch:t==null?"":dh(t)}var Hf={show:!0,scale:"y",stroke:lh,space:30,gap:5,alignTo:1,size:50,labelGap:0,labelSize:30,labelFont:Md,side:3,grid:_h,ticks:vd,border:Sd,font:xh,lineGap:bd,rotate:0};function F0(i,t){let e=3+(i||1)*2;return Ne(e*t,3)}function O0(i,t){let{scale:e,idxs:n}=i.series[0],s=i._data[0],r=i.valToPos(s[n[0]],e,!0),o=i.valToPos(s[n[1]],e,!0),a=fn(o-r),l=i.series[t],c=a/(l.points.space*be);return n[1]-n[0]<=c}var Wf={scale:null,auto:!0,sorted:0,min:De,max:-De},Ed=(i,t,e,n,s)=>s,Xf={show:!0,auto:!0,sorted:0,gaps:Ed,alpha:1,facets:[an({},Wf,{scale:"x"}),an({},Wf,{scale:"y"})]},qf={scale:"y",auto:!0,sorted:0,show:!0,spanGaps:!1,gaps:Ed,alpha:1,points:{show:O0,filter:null},values:null,min:De,max:-De,idxs:[],path:null,clip:null};function B0(i,t,e,n,s){return e/10}var Td={time:!0,auto:!0,distr:1,log:10,asinh:1,min:null,max:null,dir:1,ori:0},k0=an({},Td,{time:!1,ori:1}),Yf={};function Ad(i,t){let e=Yf[i];return e||(e={key:i,plots:[],sub(n){e.plots.push(n)},unsub(n){e.plots=e.plots.filter(s=>s!=n)},pub(n,s,r,o,a,l,c){for(let f=0;f<e.plots.length;f++)e.plots[f]!=s&&e.plots[f].pub(n,s,r,o,a,l,c)}},i!=null&&(Yf[i]=e)),e}var Sr=1,rh=2;function Vs(i,t,e){let n=i.mode,s=i.series[t],r=n==2?i._data[t]:i._data,o=i.scales,a=i.bbox,l=r[0],c=n==2?r[1]:r[t],f=n==2?o[s.facets[0].scale]:o[i.series[0].scale],u=n==2?o[s.facets[1].scale]:o[s.scale],h=a.left,p=a.top,x=a.width,w=a.height,m=i.valToPosH,d=i.valToPosV;return f.ori==0?e(s,l,c,f,u,m,d,h,p,x,w,Pa,br,La,Cd,Id):e(s,l,c,f,u,d,m,p,h,w,x,Ia,wr,Sh,Pd,Ld)}function yh(i,t){let e=0,n=0,s=ve(i.bands,ph);for(let r=0;r<s.length;r++){let o=s[r];o.series[0]==t?e=o.dir:o.series[1]==t&&(o.dir==1?n|=1:n|=2)}return[e,n==1?-1:n==2?1:n==3?2:0]}function z0(i,t,e,n,s){let r=i.mode,o=i.series[t],a=r==2?o.facets[1].scale:o.scale,l=i.scales[a];return s==-1?l.min:s==1?l.max:l.distr==3?l.dir==1?l.min:l.max:0}function $i(i,t,e,n,s,r){return Vs(i,t,(o,a,l,c,f,u,h,p,x,w,m)=>{let d=o.pxRound,v=c.dir*(c.ori==0?1:-1),C=c.ori==0?br:wr,M,P;v==1?(M=e,P=n):(M=n,P=e);let T=d(u(a[M],c,w,p)),_=d(h(l[M],f,m,x)),E=d(u(a[P],c,w,p)),B=d(h(r==1?f.max:f.min,f,m,x)),N=new Path2D(s);return C(N,E,B),C(N,T,B),C(N,T,_),N})}function Ca(i,t,e,n,s,r){let o=null;if(i.length>0){o=new Path2D;let a=t==0?La:Sh,l=e;for(let u=0;u<i.length;u++){let h=i[u];if(h[1]>h[0]){let p=h[0]-l;p>0&&a(o,l,n,p,n+r),l=h[1]}}let c=e+s-l,f=10;c>0&&a(o,l,n-f/2,c,n+r+f)}return o}function V0(i,t,e){let n=i[i.length-1];n&&n[0]==t?n[1]=e:i.push([t,e])}function vh(i,t,e,n,s,r,o){let a=[],l=i.length;for(let c=s==1?e:n;c>=e&&c<=n;c+=s)if(t[c]===null){let u=c,h=c;if(s==1)for(;++c<=n&&t[c]===null;)h=c;else for(;--c>=e&&t[c]===null;)h=c;let p=r(i[u]),x=h==u?p:r(i[h]),w=u-s;p=o<=0&&w>=0&&w<l?r(i[w]):p;let d=h+s;x=o>=0&&d>=0&&d<l?r(i[d]):x,x>=p&&a.push([p,x])}return a}function Zf(i){return i==0?sd:i==1?un:t=>Fs(t,i)}function Rd(i){let t=i==0?Pa:Ia,e=i==0?(s,r,o,a,l,c)=>{s.arcTo(r,o,a,l,c)}:(s,r,o,a,l,c)=>{s.arcTo(o,r,l,a,c)},n=i==0?(s,r,o,a,l)=>{s.rect(r,o,a,l)}:(s,r,o,a,l)=>{s.rect(o,r,l,a)};return(s,r,o,a,l,c=0,f=0)=>{c==0&&f==0?n(s,r,o,a,l):(c=Mi(c,a/2,l/2),f=Mi(f,a/2,l/2),t(s,r+c,o),e(s,r+a,o,r+a,o+l,c),e(s,r+a,o+l,r,o+l,f),e(s,r,o+l,r,o,f),e(s,r,o,r+a,o,c),s.closePath())}}var Pa=(i,t,e)=>{i.moveTo(t,e)},Ia=(i,t,e)=>{i.moveTo(e,t)},br=(i,t,e)=>{i.lineTo(t,e)},wr=(i,t,e)=>{i.lineTo(e,t)},La=Rd(0),Sh=Rd(1),Cd=(i,t,e,n,s,r)=>{i.arc(t,e,n,s,r)},Pd=(i,t,e,n,s,r)=>{i.arc(e,t,n,s,r)},Id=(i,t,e,n,s,r,o)=>{i.bezierCurveTo(t,e,n,s,r,o)},Ld=(i,t,e,n,s,r,o)=>{i.bezierCurveTo(e,t,s,n,o,r)};function Dd(i){return(t,e,n,s,r)=>Vs(t,e,(o,a,l,c,f,u,h,p,x,w,m)=>{let{pxRound:d,points:v}=o,C,M;c.ori==0?(C=Pa,M=Cd):(C=Ia,M=Pd);let P=Ne(v.width*be,3),T=(v.size-v.width)/2*be,_=Ne(T*2,3),E=new Path2D,B=new Path2D,{left:N,top:D,width:k,height:G}=t.bbox;La(B,N-_,D-_,k+_*2,G+_*2);let L=H=>{if(l[H]!=null){let Y=d(u(a[H],c,w,p)),V=d(h(l[H],f,m,x));C(E,Y+T,V),M(E,Y,V,T,0,Sa*2)}};if(r)r.forEach(L);else for(let H=n;H<=s;H++)L(H);return{stroke:P>0?E:null,fill:E,clip:B,flags:Sr|rh}})}function Nd(i){return(t,e,n,s,r,o)=>{n!=s&&(r!=n&&o!=n&&i(t,e,n),r!=s&&o!=s&&i(t,e,s),i(t,e,o))}}var G0=Nd(br),H0=Nd(wr);function Ud(i){let t=ve(i?.alignGaps,0);return(e,n,s,r)=>Vs(e,n,(o,a,l,c,f,u,h,p,x,w,m)=>{[s,r]=Ea(l,s,r);let d=o.pxRound,v=G=>d(u(G,c,w,p)),C=G=>d(h(G,f,m,x)),M,P;c.ori==0?(M=br,P=G0):(M=wr,P=H0);let T=c.dir*(c.ori==0?1:-1),_={stroke:new Path2D,fill:null,clip:null,band:null,gaps:null,flags:Sr},E=_.stroke,B=!1;if(r-s>=w*4){let G=ht=>e.posToVal(ht,c.key,!0),L=null,H=null,Y,V,lt,J=v(a[T==1?s:r]),j=v(a[s]),it=v(a[r]),ut=G(T==1?j+1:it-1);for(let ht=T==1?s:r;ht>=s&&ht<=r;ht+=T){let Q=a[ht],_t=(T==1?Q<ut:Q>ut)?J:v(Q),Tt=l[ht];_t==J?Tt!=null?(V=Tt,L==null?(M(E,_t,C(V)),Y=L=H=V):V<L?L=V:V>H&&(H=V)):Tt===null&&(B=!0):(L!=null&&P(E,J,C(L),C(H),C(Y),C(V)),Tt!=null?(V=Tt,M(E,_t,C(V)),L=H=Y=V):(L=H=null,Tt===null&&(B=!0)),J=_t,ut=G(J+T))}L!=null&&L!=H&&lt!=J&&P(E,J,C(L),C(H),C(Y),C(V))}else for(let G=T==1?s:r;G>=s&&G<=r;G+=T){let L=l[G];L===null?B=!0:L!=null&&M(E,v(a[G]),C(L))}let[D,k]=yh(e,n);if(o.fill!=null||D!=0){let G=_.fill=new Path2D(E),L=o.fillTo(e,n,o.min,o.max,D),H=C(L),Y=v(a[s]),V=v(a[r]);T==-1&&([V,Y]=[Y,V]),M(G,V,H),M(G,Y,H)}if(!o.spanGaps){let G=[];B&&G.push(...vh(a,l,s,r,T,v,t)),_.gaps=G=o.gaps(e,n,s,r,G),_.clip=Ca(G,c.ori,p,x,w,m)}return k!=0&&(_.band=k==2?[$i(e,n,s,r,E,-1),$i(e,n,s,r,E,1)]:$i(e,n,s,r,E,k)),_})}function W0(i){let t=ve(i.align,1),e=ve(i.ascDesc,!1),n=ve(i.alignGaps,0),s=ve(i.extend,!1);return(r,o,a,l)=>Vs(r,o,(c,f,u,h,p,x,w,m,d,v,C)=>{[a,l]=Ea(u,a,l);let M=c.pxRound,{left:P,width:T}=r.bbox,_=j=>M(x(j,h,v,m)),E=j=>M(w(j,p,C,d)),B=h.ori==0?br:wr,N={stroke:new Path2D,fill:null,clip:null,band:null,gaps:null,flags:Sr},D=N.stroke,k=h.dir*(h.ori==0?1:-1),G=E(u[k==1?a:l]),L=_(f[k==1?a:l]),H=L,Y=L;s&&t==-1&&(Y=P,B(D,Y,G)),B(D,L,G);for(let j=k==1?a:l;j>=a&&j<=l;j+=k){let it=u[j];if(it==null)continue;let ut=_(f[j]),ht=E(it);t==1?B(D,ut,G):B(D,H,ht),B(D,ut,ht),G=ht,H=ut}let V=H;s&&t==1&&(V=P+T,B(D,V,G));let[lt,J]=yh(r,o);if(c.fill!=null||lt!=0){let j=N.fill=new Path2D(D),it=c.fillTo(r,o,c.min,c.max,lt),ut=E(it);B(j,V,ut),B(j,Y,ut)}if(!c.spanGaps){let j=[];j.push(...vh(f,u,a,l,k,_,n));let it=c.width*be/2,ut=e||t==1?it:-it,ht=e||t==-1?-it:it;j.forEach(Q=>{Q[0]+=ut,Q[1]+=ht}),N.gaps=j=c.gaps(r,o,a,l,j),N.clip=Ca(j,h.ori,m,d,v,C)}return J!=0&&(N.band=J==2?[$i(r,o,a,l,D,-1),$i(r,o,a,l,D,1)]:$i(r,o,a,l,D,J)),N})}function $f(i,t,e,n,s,r,o=De){if(i.length>1){let a=null;for(let l=0,c=1/0;l<i.length;l++)if(t[l]!==void 0){if(a!=null){let f=fn(i[l]-i[a]);f<c&&(c=f,o=fn(e(i[l],n,s,r)-e(i[a],n,s,r)))}a=l}}return o}function X0(i){i=i||bo;let t=ve(i.size,[.6,De,1]),e=i.align||0,n=i.gap||0,s=i.radius;s=s==null?[0,0]:typeof s=="number"?[s,0]:s;let r=me(s),o=1-t[0],a=ve(t[1],De),l=ve(t[2],1),c=ve(i.disp,bo),f=ve(i.each,p=>{}),{fill:u,stroke:h}=c;return(p,x,w,m)=>Vs(p,x,(d,v,C,M,P,T,_,E,B,N,D)=>{let k=d.pxRound,G=e,L=n*be,H=a*be,Y=l*be,V,lt;M.ori==0?[V,lt]=r(p,x):[lt,V]=r(p,x);let J=M.dir*(M.ori==0?1:-1),j=M.ori==0?La:Sh,it=M.ori==0?f:(Rt,Xt,ie,Mt,Le,kt,Wt)=>{f(Rt,Xt,ie,Le,Mt,Wt,kt)},ut=ve(p.bands,ph).find(Rt=>Rt.series[0]==x),ht=ut!=null?ut.dir:0,Q=d.fillTo(p,x,d.min,d.max,ht),pt=k(_(Q,P,D,B)),_t,Tt,St,Gt=N,ne=k(d.width*be),zt=!1,ce=null,re=null,te=null,He=null;u!=null&&(ne==0||h!=null)&&(zt=!0,ce=u.values(p,x,w,m),re=new Map,new Set(ce).forEach(Rt=>{Rt!=null&&re.set(Rt,new Path2D)}),ne>0&&(te=h.values(p,x,w,m),He=new Map,new Set(te).forEach(Rt=>{Rt!=null&&He.set(Rt,new Path2D)})));let{x0:Ue,size:tn}=c;if(Ue!=null&&tn!=null){G=1,v=Ue.values(p,x,w,m),Ue.unit==2&&(v=v.map(ie=>p.posToVal(E+ie*N,M.key,!0)));let Rt=tn.values(p,x,w,m);tn.unit==2?Tt=Rt[0]*N:Tt=T(Rt[0],M,N,E)-T(0,M,N,E),Gt=$f(v,C,T,M,N,E,Gt),St=Gt-Tt+L}else Gt=$f(v,C,T,M,N,E,Gt),St=Gt*o+L,Tt=Gt-St;St<1&&(St=0),ne>=Tt/2&&(ne=0),St<5&&(k=sd);let Pe=St>0,_n=Gt-St-(Pe?ne:0);Tt=k(nh(_n,Y,H)),_t=(G==0?Tt/2:G==J?0:Tt)-G*J*((G==0?L/2:0)+(Pe?ne/2:0));let _e={stroke:null,fill:null,clip:null,band:null,gaps:null,flags:0},cn=zt?null:new Path2D,Ye=null;if(ut!=null)Ye=p.data[ut.series[1]];else{let{y0:Rt,y1:Xt}=c;Rt!=null&&Xt!=null&&(C=Xt.values(p,x,w,m),Ye=Rt.values(p,x,w,m))}let en=V*Tt,F=lt*Tt;for(let Rt=J==1?w:m;Rt>=w&&Rt<=m;Rt+=J){let Xt=C[Rt];if(Xt==null)continue;if(Ye!=null){let X=Ye[Rt]??0;if(Xt-X==0)continue;pt=_(X,P,D,B)}let ie=M.distr!=2||c!=null?v[Rt]:Rt,Mt=T(ie,M,N,E),Le=_(ve(Xt,Q),P,D,B),kt=k(Mt-_t),Wt=k(Bn(Le,pt)),A=k(Mi(Le,pt)),y=Wt-A;if(Xt!=null){let X=Xt<0?F:en,ct=Xt<0?en:F;zt?(ne>0&&te[Rt]!=null&&j(He.get(te[Rt]),kt,A+Qn(ne/2),Tt,Bn(0,y-ne),X,ct),ce[Rt]!=null&&j(re.get(ce[Rt]),kt,A+Qn(ne/2),Tt,Bn(0,y-ne),X,ct)):j(cn,kt,A+Qn(ne/2),Tt,Bn(0,y-ne),X,ct),it(p,x,Rt,kt-ne/2,A,Tt+ne,y)}}return ne>0?_e.stroke=zt?He:cn:zt||(_e._fill=d.width==0?d._fill:d._stroke??d._fill,_e.width=0),_e.fill=zt?re:cn,_e})}function q0(i,t){let e=ve(t?.alignGaps,0);return(n,s,r,o)=>Vs(n,s,(a,l,c,f,u,h,p,x,w,m,d)=>{[r,o]=Ea(c,r,o);let v=a.pxRound,C=V=>v(h(V,f,m,x)),M=V=>v(p(V,u,d,w)),P,T,_;f.ori==0?(P=Pa,_=br,T=Id):(P=Ia,_=wr,T=Ld);let E=f.dir*(f.ori==0?1:-1),B=C(l[E==1?r:o]),N=B,D=[],k=[];for(let V=E==1?r:o;V>=r&&V<=o;V+=E)if(c[V]!=null){let J=l[V],j=C(J);D.push(N=j),k.push(M(c[V]))}let G={stroke:i(D,k,P,_,T,v),fill:null,clip:null,band:null,gaps:null,flags:Sr},L=G.stroke,[H,Y]=yh(n,s);if(a.fill!=null||H!=0){let V=G.fill=new Path2D(L),lt=a.fillTo(n,s,a.min,a.max,H),J=M(lt);_(V,N,J),_(V,B,J)}if(!a.spanGaps){let V=[];V.push(...vh(l,c,r,o,E,C,e)),G.gaps=V=a.gaps(n,s,r,o,V),G.clip=Ca(V,f.ori,x,w,m,d)}return Y!=0&&(G.band=Y==2?[$i(n,s,r,o,L,-1),$i(n,s,r,o,L,1)]:$i(n,s,r,o,L,Y)),G})}function Y0(i){return q0(Z0,i)}function Z0(i,t,e,n,s,r){let o=i.length;if(o<2)return null;let a=new Path2D;if(e(a,i[0],t[0]),o==2)n(a,i[1],t[1]);else{let l=Array(o),c=Array(o-1),f=Array(o-1),u=Array(o-1);for(let h=0;h<o-1;h++)f[h]=t[h+1]-t[h],u[h]=i[h+1]-i[h],c[h]=f[h]/u[h];l[0]=c[0];for(let h=1;h<o-1;h++)c[h]===0||c[h-1]===0||c[h-1]>0!=c[h]>0?l[h]=0:(l[h]=3*(u[h-1]+u[h])/((2*u[h]+u[h-1])/c[h-1]+(u[h]+2*u[h-1])/c[h]),isFinite(l[h])||(l[h]=0));l[o-1]=c[o-2];for(let h=0;h<o-1;h++)s(a,i[h]+u[h]/3,t[h]+l[h]*u[h]/3,i[h+1]-u[h]/3,t[h+1]-l[h+1]*u[h]/3,i[h+1],t[h+1])}return a}var oh=new Set;function Jf(){for(let i of oh)i.syncRect(!0)}Mr&&(ks(Rg,_r,Jf),ks(Cg,_r,Jf,!0),ks(Ma,_r,()=>{dn.pxRatio=be}));var $0=Ud(),J0=Dd();function Kf(i,t,e,n){return(n?[i[0],i[1]].concat(i.slice(2)):[i[0]].concat(i.slice(1))).map((r,o)=>ah(r,o,t,e))}function K0(i,t){return i.map((e,n)=>n==0?{}:an({},t,e))}function ah(i,t,e,n){return an({},t==0?e:n,i)}function Fd(i,t,e){return t==null?yr:[t,e]}var j0=Fd;function Q0(i,t,e){return t==null?yr:ba(t,e,fh,!0)}function Od(i,t,e,n){return t==null?yr:Ta(t,e,i.scales[n].log,!1)}var t_=Od;function Bd(i,t,e,n){return t==null?yr:uh(t,e,i.scales[n].log,!1)}var e_=Bd;function n_(i,t,e,n,s){let r=Bn(Cf(i),Cf(t)),o=t-i,a=Si(s/n*o,e);do{let l=e[a],c=n*l/o;if(c>=s&&r+(l<5?gs.get(l):0)<=17)return[l,c]}while(++a<e.length);return[0,0]}function jf(i){let t,e;return i=i.replace(/(\d+)px/,(n,s)=>(t=un((e=+s)*be))+"px"),[i,t,e]}function i_(i){i.show&&[i.font,i.labelFont].forEach(t=>{let e=Ne(t[2]*be,1);t[0]=t[0].replace(/[0-9.]+px/,e+"px"),t[1]=e})}function dn(i,t,e){let n={mode:ve(i.mode,1)},s=n.mode;function r(g,S,R,I){let z=S.valToPct(g);return I+R*(S.dir==-1?1-z:z)}function o(g,S,R,I){let z=S.valToPct(g);return I+R*(S.dir==-1?z:1-z)}function a(g,S,R,I){return S.ori==0?r(g,S,R,I):o(g,S,R,I)}n.valToPosH=r,n.valToPosV=o;let l=!1;n.status=0;let c=n.root=li(hg);if(i.id!=null&&(c.id=i.id),jn(c,i.class),i.title){let g=li(dg,c);g.textContent=i.title}let f=vi("canvas"),u=n.ctx=f.getContext("2d"),h=li(pg,c);ks("click",h,g=>{g.target===x&&(Be!=lr||We!=cr)&&En.click(n,g)},!0);let p=n.under=li(mg,h);h.appendChild(f);let x=n.over=li(gg,h);i=vr(i);let w=+ve(i.pxAlign,1),m=Zf(w);(i.plugins||[]).forEach(g=>{g.opts&&(i=g.opts(n,i)||i)});let d=i.ms||.001,v=n.series=s==1?Kf(i.series||[],Vf,qf,!1):K0(i.series||[null],Xf),C=n.axes=Kf(i.axes||[],zf,Hf,!0),M=n.scales={},P=n.bands=i.bands||[];P.forEach(g=>{g.fill=me(g.fill||null),g.dir=ve(g.dir,-1)});let T=s==2?v[1].facets[0].scale:v[0].scale,_={axes:qi,series:ue},E=(i.drawOrder||["axes","series"]).map(g=>_[g]);function B(g){let S=g.distr==3?R=>Zi(R>0?R:g.clamp(n,R,g.min,g.max,g.key)):g.distr==4?R=>Zc(R,g.asinh):g.distr==100?R=>g.fwd(R):R=>R;return R=>{let I=S(R),{_min:z,_max:$}=g,ot=$-z;return(I-z)/ot}}function N(g){let S=M[g];if(S==null){let R=(i.scales||bo)[g]||bo;if(R.from!=null){N(R.from);let I=an({},M[R.from],R,{key:g});I.valToPct=B(I),M[g]=I}else{S=M[g]=an({},g==T?Td:k0,R),S.key=g;let I=S.time,z=S.range,$=ms(z);if((g!=T||s==2&&!I)&&($&&(z[0]==null||z[1]==null)&&(z={min:z[0]==null?Tf:{mode:1,hard:z[0],soft:z[0]},max:z[1]==null?Tf:{mode:1,hard:z[1],soft:z[1]}},$=!1),!$&&Ra(z))){let ot=z;z=(ft,yt,Lt)=>yt==null?yr:ba(yt,Lt,ot)}S.range=me(z||(I?j0:g==T?S.distr==3?t_:S.distr==4?e_:Fd:S.distr==3?Od:S.distr==4?Bd:Q0)),S.auto=me($?!1:S.auto),S.clamp=me(S.clamp||B0),S._min=S._max=null,S.valToPct=B(S)}}}N("x"),N("y"),s==1&&v.forEach(g=>{N(g.scale)}),C.forEach(g=>{N(g.scale)});for(let g in i.scales)N(g);let D=M[T],k=D.distr,G,L;D.ori==0?(jn(c,ug),G=r,L=o):(jn(c,fg),G=o,L=r);let H={};for(let g in M){let S=M[g];(S.min!=null||S.max!=null)&&(H[g]={min:S.min,max:S.max},S.min=S.max=null)}let Y=i.tzDate||(g=>new Date(un(g/d))),V=i.fmtDate||mh,lt=d==1?u0(Y):p0(Y),J=Of(Y,Ff(d==1?h0:d0,V)),j=kf(Y,Bf(g0,V)),it=[],ut=n.legend=an({},y0,i.legend),ht=n.cursor=an({},E0,{drag:{y:s==2}},i.cursor),Q=ut.show,pt=ht.show,_t=ut.markers;ut.idxs=it,_t.width=me(_t.width),_t.dash=me(_t.dash),_t.stroke=me(_t.stroke),_t.fill=me(_t.fill);let Tt,St,Gt,ne=[],zt=[],ce,re=!1,te={};if(ut.live){let g=v[1]?v[1].values:null;re=g!=null,ce=re?g(n,1,0):{_:0};for(let S in ce)te[S]=ch}if(Q)if(Tt=vi("table",Mg,c),Gt=vi("tbody",null,Tt),ut.mount(n,Tt),re){St=vi("thead",null,Tt,Gt);let g=vi("tr",null,St);vi("th",null,g);for(var He in ce)vi("th",df,g).textContent=He}else jn(Tt,wg),ut.live&&jn(Tt,bg);let Ue={show:!0},tn={show:!1};function Pe(g,S){if(S==0&&(re||!ut.live||s==2))return yr;let R=[],I=vi("tr",Eg,Gt,Gt.childNodes[S]);jn(I,g.class),g.show||jn(I,Bs);let z=vi("th",null,I);if(_t.show){let ft=li(Tg,z);if(S>0){let yt=_t.width(n,S);yt&&(ft.style.border=yt+"px "+_t.dash(n,S)+" "+_t.stroke(n,S)),ft.style.background=_t.fill(n,S)}}let $=li(df,z);g.label instanceof HTMLElement?$.appendChild(g.label):$.textContent=g.label,S>0&&(_t.show||($.style.color=g.width>0?_t.stroke(n,S):_t.fill(n,S)),_e("click",z,ft=>{if(ht._lock)return;Zt(ft);let yt=v.indexOf(g);if((ft.ctrlKey||ft.metaKey)!=ut.isolate){let Lt=v.some((Dt,Ut)=>Ut>0&&Ut!=yt&&Dt.show);v.forEach((Dt,Ut)=>{Ut>0&&Di(Ut,Lt?Ut==yt?Ue:tn:Ue,!0,on.setSeries)})}else Di(yt,{show:!g.show},!0,on.setSeries)},!1),$t&&_e(_f,z,ft=>{ht._lock||(Zt(ft),Di(v.indexOf(g),ur,!0,on.setSeries))},!1));for(var ot in ce){let ft=vi("td",Ag,I);ft.textContent="--",R.push(ft)}return[I,R]}let _n=new Map;function _e(g,S,R,I=!0){let z=_n.get(S)||{},$=ht.bind[g](n,S,R,I);$&&(ks(g,S,z[g]=$),_n.set(S,z))}function cn(g,S,R){let I=_n.get(S)||{};for(let z in I)(g==null||z==g)&&(eh(z,S,I[z]),delete I[z]);g==null&&_n.delete(S)}let Ye=0,en=0,F=0,Rt=0,Xt=0,ie=0,Mt=Xt,Le=ie,kt=F,Wt=Rt,A=0,y=0,X=0,ct=0;n.bbox={};let rt=!1,gt=!1,xt=!1,tt=!1,nt=!1,dt=!1;function U(g,S,R){(R||g!=n.width||S!=n.height)&&st(g,S),oe(!1),xt=!0,gt=!0,Tn()}function st(g,S){n.width=Ye=F=g,n.height=en=Rt=S,Xt=ie=0,vt(),Vt();let R=n.bbox;A=R.left=Fs(Xt*be,.5),y=R.top=Fs(ie*be,.5),X=R.width=Fs(F*be,.5),ct=R.height=Fs(Rt*be,.5)}let et=3;function bt(){let g=!1,S=0;for(;!g;){S++;let R=rr(S),I=Li(S);g=S==et||R&&I,g||(st(n.width,n.height),gt=!0)}}function mt({width:g,height:S}){U(g,S)}n.setSize=mt;function vt(){let g=!1,S=!1,R=!1,I=!1;C.forEach((z,$)=>{if(z.show&&z._show){let{side:ot,_size:ft}=z,yt=ot%2,Lt=z.label!=null?z.labelSize:0,Dt=ft+Lt;Dt>0&&(yt?(F-=Dt,ot==3?(Xt+=Dt,I=!0):R=!0):(Rt-=Dt,ot==0?(ie+=Dt,g=!0):S=!0))}}),Pi[0]=g,Pi[1]=R,Pi[2]=S,Pi[3]=I,F-=_i[1]+_i[3],Xt+=_i[3],Rt-=_i[2]+_i[0],ie+=_i[0]}function Vt(){let g=Xt+F,S=ie+Rt,R=Xt,I=ie;function z($,ot){switch($){case 1:return g+=ot,g-ot;case 2:return S+=ot,S-ot;case 3:return R-=ot,R+ot;case 0:return I-=ot,I+ot}}C.forEach(($,ot)=>{if($.show&&$._show){let ft=$.side;$._pos=z(ft,$._size),$.label!=null&&($._lpos=z(ft,$.labelSize))}})}if(ht.dataIdx==null){let g=ht.hover,S=g.skip=new Set(g.skip??[]);S.add(void 0);let R=g.prox=me(g.prox),I=g.bias??=0;ht.dataIdx=(z,$,ot,ft)=>{if($==0)return ot;let yt=ot,Lt=R(z,$,ot,ft)??De,Dt=Lt>=0&&Lt<De,Ut=D.ori==0?F:Rt,ee=ht.left,Me=t[0],ye=t[$];if(S.has(ye[ot])){yt=null;let de=null,Yt=null,Ht;if(I==0||I==-1)for(Ht=ot;de==null&&Ht-- >0;)S.has(ye[Ht])||(de=Ht);if(I==0||I==1)for(Ht=ot;Yt==null&&Ht++<ye.length;)S.has(ye[Ht])||(Yt=Ht);if(de!=null||Yt!=null)if(Dt){let ze=de==null?-1/0:G(Me[de],D,Ut,0),Je=Yt==null?1/0:G(Me[Yt],D,Ut,0),Sn=ee-ze,Ie=Je-ee;Sn<=Ie?Sn<=Lt&&(yt=de):Ie<=Lt&&(yt=Yt)}else yt=Yt==null?de:de==null?Yt:ot-de<=Yt-ot?de:Yt}else Dt&&fn(ee-G(Me[ot],D,Ut,0))>Lt&&(yt=null);return yt}}let Zt=g=>{ht.event=g};ht.idxs=it,ht._lock=!1;let at=ht.points;at.show=me(at.show),at.size=me(at.size),at.stroke=me(at.stroke),at.width=me(at.width),at.fill=me(at.fill);let Ft=n.focus=an({},i.focus||{alpha:.3},ht.focus),$t=Ft.prox>=0,At=$t&&at.one,se=[],Oe=[],Dn=[];function ao(g,S){let R=at.show(n,S);if(R instanceof HTMLElement)return jn(R,Sg),jn(R,g.class),Oi(R,-10,-10,F,Rt),x.insertBefore(R,se[S]),R}function nr(g,S){if(s==1||S>0){let R=s==1&&M[g.scale].time,I=g.value;g.value=R?Lf(I)?kf(Y,Bf(I,V)):I||j:I||U0,g.label=g.label||(R?A0:T0)}if(At||S>0){g.width=g.width==null?1:g.width,g.paths=g.paths||$0||kg,g.fillTo=me(g.fillTo||z0),g.pxAlign=+ve(g.pxAlign,w),g.pxRound=Zf(g.pxAlign),g.stroke=me(g.stroke||null),g.fill=me(g.fill||null),g._stroke=g._fill=g._paths=g._focus=null;let R=F0(Bn(1,g.width),1),I=g.points=an({},{size:R,width:Bn(1,R*.2),stroke:g.stroke,space:R*2,paths:J0,_stroke:null,_fill:null},g.points);I.show=me(I.show),I.filter=me(I.filter),I.fill=me(I.fill),I.stroke=me(I.stroke),I.paths=me(I.paths),I.pxAlign=g.pxAlign}if(Q){let R=Pe(g,S);ne.splice(S,0,R[0]),zt.splice(S,0,R[1]),ut.values.push(null)}if(pt){it.splice(S,0,null);let R=null;At?S==0&&(R=ao(g,S)):S>0&&(R=ao(g,S)),se.splice(S,0,R),Oe.splice(S,0,0),Dn.splice(S,0,0)}vn("addSeries",S)}function Dc(g,S){S=S??v.length,g=s==1?ah(g,S,Vf,qf):ah(g,S,{},Xf),v.splice(S,0,g),nr(v[S],S)}n.addSeries=Dc;function fa(g){if(v.splice(g,1),Q){ut.values.splice(g,1),zt.splice(g,1);let S=ne.splice(g,1)[0];cn(null,S.firstChild),S.remove()}pt&&(it.splice(g,1),se.splice(g,1)[0].remove(),Oe.splice(g,1),Dn.splice(g,1)),vn("delSeries",g)}n.delSeries=fa;let Pi=[!1,!1,!1,!1];function Hi(g,S){if(g._show=g.show,g.show){let R=g.side%2,I=M[g.scale];I==null&&(g.scale=R?v[1].scale:T,I=M[g.scale]);let z=I.time;g.size=me(g.size),g.space=me(g.space),g.rotate=me(g.rotate),ms(g.incrs)&&g.incrs.forEach(ot=>{!gs.has(ot)&&gs.set(ot,ad(ot))}),g.incrs=me(g.incrs||(I.distr==2?a0:z?d==1?c0:f0:Os)),g.splits=me(g.splits||(z&&I.distr==1?lt:I.distr==3?ih:I.distr==4?P0:C0)),g.stroke=me(g.stroke),g.grid.stroke=me(g.grid.stroke),g.ticks.stroke=me(g.ticks.stroke),g.border.stroke=me(g.border.stroke);let $=g.values;g.values=ms($)&&!ms($[0])?me($):z?ms($)?Of(Y,Ff($,V)):Lf($)?m0(Y,$):$||J:$||R0,g.filter=me(g.filter||(I.distr>=3&&I.log==10?D0:I.distr==3&&I.log==2?N0:rd)),g.font=jf(g.font),g.labelFont=jf(g.labelFont),g._size=g.size(n,null,S,0),g._space=g._rotate=g._incrs=g._found=g._splits=g._values=null,g._size>0&&(Pi[S]=!0,g._el=li(_g,h))}}function Wi(g,S,R,I){let[z,$,ot,ft]=R,yt=S%2,Lt=0;return yt==0&&(ft||$)&&(Lt=S==0&&!z||S==2&&!ot?un(zf.size/3):0),yt==1&&(z||ot)&&(Lt=S==1&&!$||S==3&&!ft?un(Hf.size/2):0),Lt}let lo=n.padding=(i.padding||[Wi,Wi,Wi,Wi]).map(g=>me(ve(g,Wi))),_i=n._padding=lo.map((g,S)=>g(n,S,Pi,0)),Ze,je=null,Qe=null,Ii=s==1?v[0].idxs:null,Yn=null,ls=!1;function co(g,S){if(t=g??[],n.data=n._data=t,s==2){Ze=0;for(let R=1;R<v.length;R++)Ze+=t[R][0].length}else{t.length==0&&(n.data=n._data=t=[[]]),Yn=t[0],Ze=Yn.length;let R=t;if(k==2){R=t.slice();let I=R[0]=Array(Ze);for(let z=0;z<Ze;z++)I[z]=z}n._data=t=R}if(oe(!0),vn("setData"),k==2&&(xt=!0),S!==!1){let R=D;R.auto(n,ls)?ho():us(T,R.min,R.max),tt=tt||ht.left>=0,dt=!0,Tn()}}n.setData=co;function ho(){ls=!0;let g,S;s==1&&(Ze>0?(je=Ii[0]=0,Qe=Ii[1]=Ze-1,g=t[0][je],S=t[0][Qe],k==2?(g=je,S=Qe):g==S&&(k==3?[g,S]=Ta(g,g,D.log,!1):k==4?[g,S]=uh(g,g,D.log,!1):D.time?S=g+un(86400/d):[g,S]=ba(g,S,fh,!0))):(je=Ii[0]=g=null,Qe=Ii[1]=S=null)),us(T,g,S)}let ir,cs,sr,b,O,K,q,Z,wt,Ct;function Et(g,S,R,I,z,$){g??=mf,R??=ph,I??="butt",z??=mf,$??="round",g!=ir&&(u.strokeStyle=ir=g),z!=cs&&(u.fillStyle=cs=z),S!=sr&&(u.lineWidth=sr=S),$!=O&&(u.lineJoin=O=$),I!=K&&(u.lineCap=K=I),R!=b&&u.setLineDash(b=R)}function Pt(g,S,R,I){S!=cs&&(u.fillStyle=cs=S),g!=q&&(u.font=q=g),R!=Z&&(u.textAlign=Z=R),I!=wt&&(u.textBaseline=wt=I)}function Bt(g,S,R,I,z=0){if(I.length>0&&g.auto(n,ls)&&(S==null||S.min==null)){let $=ve(je,0),ot=ve(Qe,I.length-1),ft=R.min==null?Dg(I,$,ot,z,g.distr==3):[R.min,R.max];g.min=Mi(g.min,R.min=ft[0]),g.max=Bn(g.max,R.max=ft[1])}}let Kt={min:null,max:null};function he(){for(let I in M){let z=M[I];H[I]==null&&(z.min==null||H[T]!=null&&z.auto(n,ls))&&(H[I]=Kt)}for(let I in M){let z=M[I];H[I]==null&&z.from!=null&&H[z.from]!=null&&(H[I]=Kt)}H[T]!=null&&oe(!0);let g={};for(let I in H){let z=H[I];if(z!=null){let $=g[I]=vr(M[I],Gg);if(z.min!=null)an($,z);else if(I!=T||s==2)if(Ze==0&&$.from==null){let ot=$.range(n,null,null,I);$.min=ot[0],$.max=ot[1]}else $.min=De,$.max=-De}}if(Ze>0){v.forEach((I,z)=>{if(s==1){let $=I.scale,ot=H[$];if(ot==null)return;let ft=g[$];if(z==0){let yt=ft.range(n,ft.min,ft.max,$);ft.min=yt[0],ft.max=yt[1],je=Si(ft.min,t[0]),Qe=Si(ft.max,t[0]),Qe-je>1&&(t[0][je]<ft.min&&je++,t[0][Qe]>ft.max&&Qe--),I.min=Yn[je],I.max=Yn[Qe]}else I.show&&I.auto&&Bt(ft,ot,I,t[z],I.sorted);I.idxs[0]=je,I.idxs[1]=Qe}else if(z>0&&I.show&&I.auto){let[$,ot]=I.facets,ft=$.scale,yt=ot.scale,[Lt,Dt]=t[z],Ut=g[ft],ee=g[yt];Ut!=null&&Bt(Ut,H[ft],$,Lt,$.sorted),ee!=null&&Bt(ee,H[yt],ot,Dt,ot.sorted),I.min=ot.min,I.max=ot.max}});for(let I in g){let z=g[I],$=H[I];if(z.from==null&&($==null||$.min==null)){let ot=z.range(n,z.min==De?null:z.min,z.max==-De?null:z.max,I);z.min=ot[0],z.max=ot[1]}}}for(let I in g){let z=g[I];if(z.from!=null){let $=g[z.from];if($.min==null)z.min=z.max=null;else{let ot=z.range(n,$.min,$.max,I);z.min=ot[0],z.max=ot[1]}}}let S={},R=!1;for(let I in g){let z=g[I],$=M[I];if($.min!=z.min||$.max!=z.max){$.min=z.min,$.max=z.max;let ot=$.distr;$._min=ot==3?Zi($.min):ot==4?Zc($.min,$.asinh):ot==100?$.fwd($.min):$.min,$._max=ot==3?Zi($.max):ot==4?Zc($.max,$.asinh):ot==100?$.fwd($.max):$.max,S[I]=R=!0}}if(R){v.forEach((I,z)=>{s==2?z>0&&S.y&&(I._paths=null):S[I.scale]&&(I._paths=null)});for(let I in S)xt=!0,vn("setScale",I);pt&&ht.left>=0&&(tt=dt=!0)}for(let I in H)H[I]=null}function Ot(g){let S=nh(je-1,0,Ze-1),R=nh(Qe+1,0,Ze-1);for(;g[S]==null&&S>0;)S--;for(;g[R]==null&&R<Ze-1;)R++;return[S,R]}function ue(){if(Ze>0){let g=v.some(S=>S._focus)&&Ct!=Ft.alpha;g&&(u.globalAlpha=Ct=Ft.alpha),v.forEach((S,R)=>{if(R>0&&S.show&&(qe(R,!1),qe(R,!0),S._paths==null)){let I=Ct;Ct!=S.alpha&&(u.globalAlpha=Ct=S.alpha);let z=s==2?[0,t[R][0].length-1]:Ot(t[R]);S._paths=S.paths(n,R,z[0],z[1]),Ct!=I&&(u.globalAlpha=Ct=I)}}),v.forEach((S,R)=>{if(R>0&&S.show){let I=Ct;Ct!=S.alpha&&(u.globalAlpha=Ct=S.alpha),S._paths!=null&&Ae(R,!1);{let z=S._paths!=null?S._paths.gaps:null,$=S.points.show(n,R,je,Qe,z),ot=S.points.filter(n,R,$,z);($||ot)&&(S.points._paths=S.points.paths(n,R,je,Qe,ot),Ae(R,!0))}Ct!=I&&(u.globalAlpha=Ct=I),vn("drawSeries",R)}}),g&&(u.globalAlpha=Ct=1)}}function qe(g,S){let R=S?v[g].points:v[g];R._stroke=R.stroke(n,g),R._fill=R.fill(n,g)}function Ae(g,S){let R=S?v[g].points:v[g],{stroke:I,fill:z,clip:$,flags:ot,_stroke:ft=R._stroke,_fill:yt=R._fill,_width:Lt=R.width}=R._paths;Lt=Ne(Lt*be,3);let Dt=null,Ut=Lt%2/2;S&&yt==null&&(yt=Lt>0?"#fff":ft);let ee=R.pxAlign==1&&Ut>0;if(ee&&u.translate(Ut,Ut),!S){let Me=A-Lt/2,ye=y-Lt/2,de=X+Lt,Yt=ct+Lt;Dt=new Path2D,Dt.rect(Me,ye,de,Yt)}S?Nt(ft,Lt,R.dash,R.cap,yt,I,z,ot,$):Re(g,ft,Lt,R.dash,R.cap,yt,I,z,ot,Dt,$),ee&&u.translate(-Ut,-Ut)}function Re(g,S,R,I,z,$,ot,ft,yt,Lt,Dt){let Ut=!1;yt!=0&&P.forEach((ee,Me)=>{if(ee.series[0]==g){let ye=v[ee.series[1]],de=t[ee.series[1]],Yt=(ye._paths||bo).band;ms(Yt)&&(Yt=ee.dir==1?Yt[0]:Yt[1]);let Ht,ze=null;ye.show&&Yt&&Ug(de,je,Qe)?(ze=ee.fill(n,Me)||$,Ht=ye._paths.clip):Yt=null,Nt(S,R,I,z,ze,ot,ft,yt,Lt,Dt,Ht,Yt),Ut=!0}}),Ut||Nt(S,R,I,z,$,ot,ft,yt,Lt,Dt)}let hn=Sr|rh;function Nt(g,S,R,I,z,$,ot,ft,yt,Lt,Dt,Ut){Et(g,S,R,I,z),(yt||Lt||Ut)&&(u.save(),yt&&u.clip(yt),Lt&&u.clip(Lt)),Ut?(ft&hn)==hn?(u.clip(Ut),Dt&&u.clip(Dt),pe(z,ot),nn(g,$,S)):ft&rh?(pe(z,ot),u.clip(Ut),nn(g,$,S)):ft&Sr&&(u.save(),u.clip(Ut),Dt&&u.clip(Dt),pe(z,ot),u.restore(),nn(g,$,S)):(pe(z,ot),nn(g,$,S)),(yt||Lt||Ut)&&u.restore()}function nn(g,S,R){R>0&&(S instanceof Map?S.forEach((I,z)=>{u.strokeStyle=ir=z,u.stroke(I)}):S!=null&&g&&u.stroke(S))}function pe(g,S){S instanceof Map?S.forEach((R,I)=>{u.fillStyle=cs=I,u.fill(R)}):S!=null&&g&&u.fill(S)}function Xi(g,S,R,I){let z=C[g],$;if(I<=0)$=[0,0];else{let ot=z._space=z.space(n,g,S,R,I),ft=z._incrs=z.incrs(n,g,S,R,I,ot);$=n_(S,R,ft,I,ot)}return z._found=$}function sn(g,S,R,I,z,$,ot,ft,yt,Lt){let Dt=ot%2/2;w==1&&u.translate(Dt,Dt),Et(ft,ot,yt,Lt,ft),u.beginPath();let Ut,ee,Me,ye,de=z+(I==0||I==3?-$:$);R==0?(ee=z,ye=de):(Ut=z,Me=de);for(let Yt=0;Yt<g.length;Yt++)S[Yt]!=null&&(R==0?Ut=Me=g[Yt]:ee=ye=g[Yt],u.moveTo(Ut,ee),u.lineTo(Me,ye));u.stroke(),w==1&&u.translate(-Dt,-Dt)}function rr(g){let S=!0;return C.forEach((R,I)=>{if(!R.show)return;let z=M[R.scale];if(z.min==null){R._show&&(S=!1,R._show=!1,oe(!1));return}else R._show||(S=!1,R._show=!0,oe(!1));let $=R.side,ot=$%2,{min:ft,max:yt}=z,[Lt,Dt]=Xi(I,ft,yt,ot==0?F:Rt);if(Dt==0)return;let Ut=z.distr==2,ee=R._splits=R.splits(n,I,ft,yt,Lt,Dt,Ut),Me=z.distr==2?ee.map(Ht=>Yn[Ht]):ee,ye=z.distr==2?Yn[ee[1]]-Yn[ee[0]]:Lt,de=R._values=R.values(n,R.filter(n,Me,I,Dt,ye),I,Dt,ye);R._rotate=$==2?R.rotate(n,de,I,Dt):0;let Yt=R._size;R._size=ci(R.size(n,de,I,g)),Yt!=null&&R._size!=Yt&&(S=!1)}),S}function Li(g){let S=!0;return lo.forEach((R,I)=>{let z=R(n,I,Pi,g);z!=_i[I]&&(S=!1),_i[I]=z}),S}function qi(){for(let g=0;g<C.length;g++){let S=C[g];if(!S.show||!S._show)continue;let R=S.side,I=R%2,z,$,ot=S.stroke(n,g),ft=R==0||R==3?-1:1,[yt,Lt]=S._found;if(S.label!=null){let Fn=S.labelGap*ft,Jn=un((S._lpos+Fn)*be);Pt(S.labelFont[0],ot,"center",R==2?"top":pf),u.save(),I==1?(z=$=0,u.translate(Jn,un(y+ct/2)),u.rotate((R==3?-Sa:Sa)/2)):(z=un(A+X/2),$=Jn);let Us=id(S.label)?S.label(n,g,yt,Lt):S.label;u.fillText(Us,z,$),u.restore()}if(Lt==0)continue;let Dt=M[S.scale],Ut=I==0?X:ct,ee=I==0?A:y,Me=S._splits,ye=Dt.distr==2?Me.map(Fn=>Yn[Fn]):Me,de=Dt.distr==2?Yn[Me[1]]-Yn[Me[0]]:yt,Yt=S.ticks,Ht=S.border,ze=Yt.show?Yt.size:0,Je=un(ze*be),Sn=un((S.alignTo==2?S._size-ze-S.gap:S.gap)*be),Ie=S._rotate*-Sa/180,Ke=m(S._pos*be),Zn=(Je+Sn)*ft,Un=Ke+Zn;$=I==0?Un:0,z=I==1?Un:0;let oi=S.font[0],xi=S.align==1?mr:S.align==2?Xc:Ie>0?mr:Ie<0?Xc:I==0?"center":R==3?Xc:mr,Ui=Ie||I==1?"middle":R==2?"top":pf;Pt(oi,ot,xi,Ui);let $n=S.font[1]*S.lineGap,ai=Me.map(Fn=>m(a(Fn,Dt,Ut,ee))),yi=S._values;for(let Fn=0;Fn<yi.length;Fn++){let Jn=yi[Fn];if(Jn!=null){I==0?z=ai[Fn]:$=ai[Fn],Jn=""+Jn;let Us=Jn.indexOf(`
`)==-1?[Jn]:Jn.split(/\n/gm);for(let On=0;On<Us.length;On++){let cf=Us[On];Ie?(u.save(),u.translate(z,$+On*$n),u.rotate(Ie),u.fillText(cf,0,0),u.restore()):u.fillText(cf,z,$+On*$n)}}}Yt.show&&sn(ai,Yt.filter(n,ye,g,Lt,de),I,R,Ke,Je,Ne(Yt.width*be,3),Yt.stroke(n,g),Yt.dash,Yt.cap);let Fi=S.grid;Fi.show&&sn(ai,Fi.filter(n,ye,g,Lt,de),I,I==0?2:1,I==0?y:A,I==0?ct:X,Ne(Fi.width*be,3),Fi.stroke(n,g),Fi.dash,Fi.cap),Ht.show&&sn([Ke],[1],I==0?1:0,I==0?1:2,I==1?y:A,I==1?ct:X,Ne(Ht.width*be,3),Ht.stroke(n,g),Ht.dash,Ht.cap)}vn("drawAxes")}function oe(g){v.forEach((S,R)=>{R>0&&(S._paths=null,g&&(s==1?(S.min=null,S.max=null):S.facets.forEach(I=>{I.min=null,I.max=null})))})}let $e=!1,Nn=!1,Ce=[];function rn(){Nn=!1;for(let g=0;g<Ce.length;g++)vn(...Ce[g]);Ce.length=0}function Tn(){$e||($g(Wu),$e=!0)}function da(g,S=!1){$e=!0,Nn=S,g(n),Wu(),S&&Ce.length>0&&queueMicrotask(rn)}n.batch=da;function Wu(){if(rt&&(he(),rt=!1),xt&&(bt(),xt=!1),gt){if(Ve(p,mr,Xt),Ve(p,"top",ie),Ve(p,yo,F),Ve(p,vo,Rt),Ve(x,mr,Xt),Ve(x,"top",ie),Ve(x,yo,F),Ve(x,vo,Rt),Ve(h,yo,Ye),Ve(h,vo,en),f.width=un(Ye*be),f.height=un(en*be),C.forEach(({_el:g,_show:S,_size:R,_pos:I,side:z})=>{if(g!=null)if(S){let $=z===3||z===0?R:0,ot=z%2==1;Ve(g,ot?"left":"top",I-$),Ve(g,ot?"width":"height",R),Ve(g,ot?"top":"left",ot?ie:Xt),Ve(g,ot?"height":"width",ot?Rt:F),th(g,Bs)}else jn(g,Bs)}),ir=cs=sr=O=K=q=Z=wt=b=null,Ct=1,po(!0),Xt!=Mt||ie!=Le||F!=kt||Rt!=Wt){oe(!1);let g=F/kt,S=Rt/Wt;if(pt&&!tt&&ht.left>=0){ht.left*=g,ht.top*=S,or&&Oi(or,un(ht.left),0,F,Rt),ar&&Oi(ar,0,un(ht.top),F,Rt);for(let R=0;R<se.length;R++){let I=se[R];I!=null&&(Oe[R]*=g,Dn[R]*=S,Oi(I,ci(Oe[R]),ci(Dn[R]),F,Rt))}}if(ke.show&&!nt&&ke.left>=0&&ke.width>0){ke.left*=g,ke.width*=g,ke.top*=S,ke.height*=S;for(let R in kc)Ve(hr,R,ke[R])}Mt=Xt,Le=ie,kt=F,Wt=Rt}vn("setSize"),gt=!1}Ye>0&&en>0&&(u.clearRect(0,0,f.width,f.height),vn("drawClear"),E.forEach(g=>g()),vn("draw")),ke.show&&nt&&(pa(ke),nt=!1),pt&&tt&&(Ns(null,!0,!1),tt=!1),ut.show&&ut.live&&dt&&(Oc(),dt=!1),l||(l=!0,n.status=1,vn("ready")),ls=!1,$e=!1}n.redraw=(g,S)=>{xt=S||!1,g!==!1?us(T,D.min,D.max):Tn()};function Nc(g,S){let R=M[g];if(R.from==null){if(Ze==0){let I=R.range(n,S.min,S.max,g);S.min=I[0],S.max=I[1]}if(S.min>S.max){let I=S.min;S.min=S.max,S.max=I}if(Ze>1&&S.min!=null&&S.max!=null&&S.max-S.min<1e-16)return;g==T&&R.distr==2&&Ze>0&&(S.min=Si(S.min,t[0]),S.max=Si(S.max,t[0]),S.min==S.max&&S.max++),H[g]=S,rt=!0,Tn()}}n.setScale=Nc;let Uc,Fc,or,ar,Xu,qu,lr,cr,Yu,Zu,Be,We,hs=!1,En=ht.drag,xn=En.x,yn=En.y;pt&&(ht.x&&(Uc=li(yg,x)),ht.y&&(Fc=li(vg,x)),D.ori==0?(or=Uc,ar=Fc):(or=Fc,ar=Uc),Be=ht.left,We=ht.top);let ke=n.select=an({show:!0,over:!0,left:0,width:0,top:0,height:0},i.select),hr=ke.show?li(xg,ke.over?x:p):null;function pa(g,S){if(ke.show){for(let R in g)ke[R]=g[R],R in kc&&Ve(hr,R,g[R]);S!==!1&&vn("setSelect")}}n.setSelect=pa;function Hm(g){if(v[g].show)Q&&th(ne[g],Bs);else if(Q&&jn(ne[g],Bs),pt){let R=At?se[0]:se[g];R!=null&&Oi(R,-10,-10,F,Rt)}}function us(g,S,R){Nc(g,{min:S,max:R})}function Di(g,S,R,I){S.focus!=null&&Zm(g),S.show!=null&&v.forEach((z,$)=>{$>0&&(g==$||g==null)&&(z.show=S.show,Hm($),s==2?(us(z.facets[0].scale,null,null),us(z.facets[1].scale,null,null)):us(z.scale,null,null),Tn())}),R!==!1&&vn("setSeries",g,S),I&&mo("setSeries",n,g,S)}n.setSeries=Di;function Wm(g,S){an(P[g],S)}function Xm(g,S){g.fill=me(g.fill||null),g.dir=ve(g.dir,-1),S=S??P.length,P.splice(S,0,g)}function qm(g){g==null?P.length=0:P.splice(g,1)}n.addBand=Xm,n.setBand=Wm,n.delBand=qm;function Ym(g,S){v[g].alpha=S,pt&&se[g]!=null&&(se[g].style.opacity=S),Q&&ne[g]&&(ne[g].style.opacity=S)}let Yi,fs,Ds,ur={focus:!0};function Zm(g){if(g!=Ds){let S=g==null,R=Ft.alpha!=1;v.forEach((I,z)=>{if(s==1||z>0){let $=S||z==0||z==g;I._focus=S?null:$,R&&Ym(z,$?1:Ft.alpha)}}),Ds=g,R&&Tn()}}Q&&$t&&_e(xf,Tt,g=>{ht._lock||(Zt(g),Ds!=null&&Di(null,ur,!0,on.setSeries))});function Ni(g,S,R){let I=M[S];R&&(g=g/be-(I.ori==1?ie:Xt));let z=F;I.ori==1&&(z=Rt,g=z-g),I.dir==-1&&(g=z-g);let $=I._min,ot=I._max,ft=g/z,yt=$+(ot-$)*ft,Lt=I.distr;return Lt==3?xr(10,yt):Lt==4?Og(yt,I.asinh):Lt==100?I.bwd(yt):yt}function $m(g,S){let R=Ni(g,T,S);return Si(R,t[0],je,Qe)}n.valToIdx=g=>Si(g,t[0]),n.posToIdx=$m,n.posToVal=Ni,n.valToPos=(g,S,R)=>M[S].ori==0?r(g,M[S],R?X:F,R?A:0):o(g,M[S],R?ct:Rt,R?y:0),n.setCursor=(g,S,R)=>{Be=g.left,We=g.top,Ns(null,S,R)};function $u(g,S){Ve(hr,mr,ke.left=g),Ve(hr,yo,ke.width=S)}function Ju(g,S){Ve(hr,"top",ke.top=g),Ve(hr,vo,ke.height=S)}let uo=D.ori==0?$u:Ju,fo=D.ori==1?$u:Ju;function Jm(){if(Q&&ut.live)for(let g=s==2?1:0;g<v.length;g++){if(g==0&&re)continue;let S=ut.values[g],R=0;for(let I in S)zt[g][R++].firstChild.nodeValue=S[I]}}function Oc(g,S){if(g!=null&&(g.idxs?g.idxs.forEach((R,I)=>{it[I]=R}):Vg(g.idx)||it.fill(g.idx),ut.idx=it[0]),Q&&ut.live){for(let R=0;R<v.length;R++)(R>0||s==1&&!re)&&Km(R,it[R]);Jm()}dt=!1,S!==!1&&vn("setLegend")}n.setLegend=Oc;function Km(g,S){let R=v[g],I=g==0&&k==2?Yn:t[g],z;re?z=R.values(n,g,S)??te:(z=R.value(n,S==null?null:I[S],g,S),z=z==null?te:{_:z}),ut.values[g]=z}function Ns(g,S,R){Yu=Be,Zu=We,[Be,We]=ht.move(n,Be,We),ht.left=Be,ht.top=We,pt&&(or&&Oi(or,un(Be),0,F,Rt),ar&&Oi(ar,0,un(We),F,Rt));let I,z=je>Qe;Yi=De,fs=null;let $=D.ori==0?F:Rt,ot=D.ori==1?F:Rt;if(Be<0||Ze==0||z){I=ht.idx=null;for(let ft=0;ft<v.length;ft++){let yt=se[ft];yt!=null&&Oi(yt,-10,-10,F,Rt)}$t&&Di(null,ur,!0,g==null&&on.setSeries),ut.live&&(it.fill(I),dt=!0)}else{let ft,yt,Lt;s==1&&(ft=D.ori==0?Be:We,yt=Ni(ft,T),I=ht.idx=Si(yt,t[0],je,Qe),Lt=G(t[0][I],D,$,0));let Dt=-10,Ut=-10,ee=0,Me=0,ye=!0,de="",Yt="";for(let Ht=s==2?1:0;Ht<v.length;Ht++){let ze=v[Ht],Je=it[Ht],Sn=Je==null?null:s==1?t[Ht][Je]:t[Ht][1][Je],Ie=ht.dataIdx(n,Ht,I,yt),Ke=Ie==null?null:s==1?t[Ht][Ie]:t[Ht][1][Ie];if(dt=dt||Ke!=Sn||Ie!=Je,it[Ht]=Ie,Ht>0&&ze.show){let Zn=Ie==null?-10:Ie==I?Lt:G(s==1?t[0][Ie]:t[Ht][0][Ie],D,$,0),Un=Ke==null?-10:L(Ke,s==1?M[ze.scale]:M[ze.facets[1].scale],ot,0);if($t&&Ke!=null){let oi=D.ori==1?Be:We,xi=fn(Ft.dist(n,Ht,Ie,Un,oi));if(xi<Yi){let Ui=Ft.bias;if(Ui!=0){let $n=Ni(oi,ze.scale),ai=Ke>=0?1:-1,yi=$n>=0?1:-1;yi==ai&&(yi==1?Ui==1?Ke>=$n:Ke<=$n:Ui==1?Ke<=$n:Ke>=$n)&&(Yi=xi,fs=Ht)}else Yi=xi,fs=Ht}}if(dt||At){let oi,xi;D.ori==0?(oi=Zn,xi=Un):(oi=Un,xi=Zn);let Ui,$n,ai,yi,Fi,Fn,Jn=!0,Us=at.bbox;if(Us!=null){Jn=!1;let On=Us(n,Ht);ai=On.left,yi=On.top,Ui=On.width,$n=On.height}else ai=oi,yi=xi,Ui=$n=at.size(n,Ht);if(Fn=at.fill(n,Ht),Fi=at.stroke(n,Ht),At)Ht==fs&&Yi<=Ft.prox&&(Dt=ai,Ut=yi,ee=Ui,Me=$n,ye=Jn,de=Fn,Yt=Fi);else{let On=se[Ht];On!=null&&(Oe[Ht]=ai,Dn[Ht]=yi,Ef(On,Ui,$n,Jn),bf(On,Fn,Fi),Oi(On,ci(ai),ci(yi),F,Rt))}}}}if(At){let Ht=Ft.prox,ze=Ds==null?Yi<=Ht:Yi>Ht||fs!=Ds;if(dt||ze){let Je=se[0];Je!=null&&(Oe[0]=Dt,Dn[0]=Ut,Ef(Je,ee,Me,ye),bf(Je,de,Yt),Oi(Je,ci(Dt),ci(Ut),F,Rt))}}}if(ke.show&&hs)if(g!=null){let[ft,yt]=on.scales,[Lt,Dt]=on.match,[Ut,ee]=g.cursor.sync.scales,Me=g.cursor.drag;if(xn=Me._x,yn=Me._y,xn||yn){let{left:ye,top:de,width:Yt,height:Ht}=g.select,ze=g.scales[Ut].ori,Je=g.posToVal,Sn,Ie,Ke,Zn,Un,oi=ft!=null&&Lt(ft,Ut),xi=yt!=null&&Dt(yt,ee);oi&&xn?(ze==0?(Sn=ye,Ie=Yt):(Sn=de,Ie=Ht),Ke=M[ft],Zn=G(Je(Sn,Ut),Ke,$,0),Un=G(Je(Sn+Ie,Ut),Ke,$,0),uo(Mi(Zn,Un),fn(Un-Zn))):uo(0,$),xi&&yn?(ze==1?(Sn=ye,Ie=Yt):(Sn=de,Ie=Ht),Ke=M[yt],Zn=L(Je(Sn,ee),Ke,ot,0),Un=L(Je(Sn+Ie,ee),Ke,ot,0),fo(Mi(Zn,Un),fn(Un-Zn))):fo(0,ot)}else zc()}else{let ft=fn(Yu-Xu),yt=fn(Zu-qu);if(D.ori==1){let ee=ft;ft=yt,yt=ee}xn=En.x&&ft>=En.dist,yn=En.y&&yt>=En.dist;let Lt=En.uni;Lt!=null?xn&&yn&&(xn=ft>=Lt,yn=yt>=Lt,!xn&&!yn&&(yt>ft?yn=!0:xn=!0)):En.x&&En.y&&(xn||yn)&&(xn=yn=!0);let Dt,Ut;xn&&(D.ori==0?(Dt=lr,Ut=Be):(Dt=cr,Ut=We),uo(Mi(Dt,Ut),fn(Ut-Dt)),yn||fo(0,ot)),yn&&(D.ori==1?(Dt=lr,Ut=Be):(Dt=cr,Ut=We),fo(Mi(Dt,Ut),fn(Ut-Dt)),xn||uo(0,$)),!xn&&!yn&&(uo(0,0),fo(0,0))}if(En._x=xn,En._y=yn,g==null){if(R){if(lf!=null){let[ft,yt]=on.scales;on.values[0]=ft!=null?Ni(D.ori==0?Be:We,ft):null,on.values[1]=yt!=null?Ni(D.ori==1?Be:We,yt):null}mo(qc,n,Be,We,F,Rt,I)}if($t){let ft=R&&on.setSeries,yt=Ft.prox;Ds==null?Yi<=yt&&Di(fs,ur,!0,ft):Yi>yt?Di(null,ur,!0,ft):fs!=Ds&&Di(fs,ur,!0,ft)}}dt&&(ut.idx=I,Oc()),S!==!1&&vn("setCursor")}let ds=null;Object.defineProperty(n,"rect",{get(){return ds==null&&po(!1),ds}});function po(g=!1){g?ds=null:(ds=x.getBoundingClientRect(),vn("syncRect",ds))}function Ku(g,S,R,I,z,$,ot){ht._lock||hs&&g!=null&&g.movementX==0&&g.movementY==0||(Bc(g,S,R,I,z,$,ot,!1,g!=null),g!=null?Ns(null,!0,!0):Ns(S,!0,!1))}function Bc(g,S,R,I,z,$,ot,ft,yt){if(ds==null&&po(!1),Zt(g),g!=null)R=g.clientX-ds.left,I=g.clientY-ds.top;else{if(R<0||I<0){Be=-10,We=-10;return}let[Lt,Dt]=on.scales,Ut=S.cursor.sync,[ee,Me]=Ut.values,[ye,de]=Ut.scales,[Yt,Ht]=on.match,ze=S.axes[0].side%2==1,Je=D.ori==0?F:Rt,Sn=D.ori==1?F:Rt,Ie=ze?$:z,Ke=ze?z:$,Zn=ze?I:R,Un=ze?R:I;if(ye!=null?R=Yt(Lt,ye)?a(ee,M[Lt],Je,0):-10:R=Je*(Zn/Ie),de!=null?I=Ht(Dt,de)?a(Me,M[Dt],Sn,0):-10:I=Sn*(Un/Ke),D.ori==1){let oi=R;R=I,I=oi}}yt&&(S==null||S.cursor.event.type==qc)&&((R<=1||R>=F-1)&&(R=Fs(R,F)),(I<=1||I>=Rt-1)&&(I=Fs(I,Rt))),ft?(Xu=R,qu=I,[lr,cr]=ht.move(n,R,I)):(Be=R,We=I)}let kc={width:0,height:0,left:0,top:0};function zc(){pa(kc,!1)}let ju,Qu,tf,ef;function nf(g,S,R,I,z,$,ot){hs=!0,xn=yn=En._x=En._y=!1,Bc(g,S,R,I,z,$,ot,!0,!1),g!=null&&(_e(Yc,jc,sf,!1),mo(gf,n,lr,cr,F,Rt,null));let{left:ft,top:yt,width:Lt,height:Dt}=ke;ju=ft,Qu=yt,tf=Lt,ef=Dt}function sf(g,S,R,I,z,$,ot){hs=En._x=En._y=!1,Bc(g,S,R,I,z,$,ot,!1,!0);let{left:ft,top:yt,width:Lt,height:Dt}=ke,Ut=Lt>0||Dt>0,ee=ju!=ft||Qu!=yt||tf!=Lt||ef!=Dt;if(Ut&&ee&&pa(ke),En.setScale&&Ut&&ee){let Me=ft,ye=Lt,de=yt,Yt=Dt;if(D.ori==1&&(Me=yt,ye=Dt,de=ft,Yt=Lt),xn&&us(T,Ni(Me,T),Ni(Me+ye,T)),yn)for(let Ht in M){let ze=M[Ht];Ht!=T&&ze.from==null&&ze.min!=De&&us(Ht,Ni(de+Yt,Ht),Ni(de,Ht))}zc()}else ht.lock&&(ht._lock=!ht._lock,Ns(S,!0,g!=null));g!=null&&(cn(Yc,jc),mo(Yc,n,Be,We,F,Rt,null))}function jm(g,S,R,I,z,$,ot){if(ht._lock)return;Zt(g);let ft=hs;if(hs){let yt=!0,Lt=!0,Dt=10,Ut,ee;D.ori==0?(Ut=xn,ee=yn):(Ut=yn,ee=xn),Ut&&ee&&(yt=Be<=Dt||Be>=F-Dt,Lt=We<=Dt||We>=Rt-Dt),Ut&&yt&&(Be=Be<lr?0:F),ee&&Lt&&(We=We<cr?0:Rt),Ns(null,!0,!0),hs=!1}Be=-10,We=-10,it.fill(null),Ns(null,!0,!0),ft&&(hs=ft)}function rf(g,S,R,I,z,$,ot){ht._lock||(Zt(g),ho(),zc(),g!=null&&mo(yf,n,Be,We,F,Rt,null))}function of(){C.forEach(i_),U(n.width,n.height,!0)}ks(Ma,_r,of);let fr={};fr.mousedown=nf,fr.mousemove=Ku,fr.mouseup=sf,fr.dblclick=rf,fr.setSeries=(g,S,R,I)=>{let z=on.match[2];R=z(n,S,R),R!=-1&&Di(R,I,!0,!1)},pt&&(_e(gf,x,nf),_e(qc,x,Ku),_e(_f,x,g=>{Zt(g),po(!1)}),_e(xf,x,jm),_e(yf,x,rf),oh.add(n),n.syncRect=po);let ma=n.hooks=i.hooks||{};function vn(g,S,R){Nn?Ce.push([g,S,R]):g in ma&&ma[g].forEach(I=>{I.call(null,n,S,R)})}(i.plugins||[]).forEach(g=>{for(let S in g.hooks)ma[S]=(ma[S]||[]).concat(g.hooks[S])});let af=(g,S,R)=>R,on=an({key:null,setSeries:!1,filters:{pub:Pf,sub:Pf},scales:[T,v[1]?v[1].scale:null],match:[If,If,af],values:[null,null]},ht.sync);on.match.length==2&&on.match.push(af),ht.sync=on;let lf=on.key,Vc=Ad(lf);function mo(g,S,R,I,z,$,ot){on.filters.pub(g,S,R,I,z,$,ot)&&Vc.pub(g,S,R,I,z,$,ot)}Vc.sub(n);function Qm(g,S,R,I,z,$,ot){on.filters.sub(g,S,R,I,z,$,ot)&&fr[g](null,S,R,I,z,$,ot)}n.pub=Qm;function tg(){Vc.unsub(n),oh.delete(n),_n.clear(),eh(Ma,_r,of),c.remove(),Tt?.remove(),vn("destroy")}n.destroy=tg;function Gc(){vn("init",i,t),co(t||i.data,!1),H[T]?Nc(T,H[T]):ho(),nt=ke.show&&(ke.width>0||ke.height>0),tt=dt=!0,U(i.width,i.height)}return v.forEach(nr),C.forEach(Hi),e?e instanceof HTMLElement?(e.appendChild(c),Gc()):e(n,Gc):Gc(),n}dn.assign=an;dn.fmtNum=dh;dn.rangeNum=ba;dn.rangeLog=Ta;dn.rangeAsinh=uh;dn.orient=Vs;dn.pxRatio=be;dn.join=Zg;dn.fmtDate=mh,dn.tzDate=r0;dn.sync=Ad;{dn.addGap=V0,dn.clipGaps=Ca;let i=dn.paths={points:Dd};i.linear=Ud,i.stepped=W0,i.bars=X0,i.spline=Y0}var kd=170,zd=40,Da=class{constructor(t,e,n,s){Object.assign(this,{trial:t,clock:e,box:n,caption:s}),e.on("markers",()=>this.rebuild()),e.on("stretch",()=>this.setStretch()),e.on("row",()=>this.moveClock()),ps(()=>this.rebuild()),new ResizeObserver(()=>{let r=n.clientWidth;r&&r!==this.chart.width&&this.chart.setSize({width:r,height:kd}),this.moveClock()}).observe(n)}rebuild(){this.chart?.destroy(),this.line=void 0;let t=this.clock.markers.filter(r=>this.trial.markers.includes(r)),e=t.map(r=>this.trial.arrays.error[this.trial.markers.indexOf(r)]),n={stroke:xe("soft"),font:"11px system-ui, sans-serif",grid:{stroke:xe("rule"),width:1},ticks:{stroke:xe("rule"),width:1,size:4}},s=[{stroke:xe("look"),width:1.6},{stroke:xe("measured"),width:1.6,dash:[6,3]}];this.chart=new dn({width:this.box.clientWidth||600,height:kd,legend:{show:!1},cursor:{show:!1},scales:{x:{time:!1},y:{range:(r,o,a)=>[0,Math.max(1.08*a,10)]}},axes:[{...n,size:26,values:(r,o)=>o.map((a,l)=>l===o.length-1?`${a} s`:a)},{...n,size:46,values:(r,o)=>o.map(a=>`${a}`)}],series:[{},{stroke:xe("soft"),width:1.6,points:{show:!1}},...e.map((r,o)=>({...s[o%2],points:{show:!1}}))],hooks:{draw:[r=>s_(r),()=>this.moveClock()]}},[this.trial.time,...[this.trial.rms,...e].map(r_)],this.box),this.line=document.createElement("div"),this.line.className="clock",this.chart.over.append(this.line),this.#t(),this.#e(t),this.setStretch()}#e(t){let e=[["of-rms","RMS of the frame"],...t.map((n,s)=>[`of-picked-${s%2}`,n])];this.caption.replaceChildren(...e.map(([n,s])=>{let r=document.createElement("span");return r.className=n,r.textContent=s,r}))}setStretch(){if(!this.chart)return;let{time:t,first:e,last:n}=this.clock;this.chart.setScale("x",{min:t[e],max:t[n]}),this.moveClock()}moveClock(){if(!this.line)return;let t=this.chart.valToPos(this.clock.time[this.clock.row],"x");this.line.style.transform=`translateX(${t}px)`}#t(){let t=this.chart.over,e=n=>{let s=n.clientX-t.getBoundingClientRect().left;this.clock.show(this.clock.rowAt(this.chart.posToVal(s,"x")))};t.addEventListener("pointerdown",n=>{t.setPointerCapture(n.pointerId),e(n)}),t.addEventListener("pointermove",n=>n.buttons&&e(n))}};function s_(i){if(i.scales.y.max<zd)return;let{ctx:t,bbox:e}=i,n=i.valToPos(zd,"y",!0);t.save(),t.strokeStyle=xe("look"),t.setLineDash([2*devicePixelRatio,3*devicePixelRatio]),t.lineWidth=devicePixelRatio,t.beginPath(),t.moveTo(e.left,n),t.lineTo(e.left+e.width,n),t.stroke(),t.restore()}var r_=i=>Array.from(i,t=>Number.isFinite(t)?1e3*t:null);var Mh=1.96,bh=150,o_=320,a_="11px system-ui, sans-serif",l_=.25,Na=class{constructor(t,e){this.trial=t,this.clock=e,this.live=new Set,this.watcher=new IntersectionObserver(n=>this.#e(n),{rootMargin:"400px"}),e.on("row",()=>this.live.forEach(n=>n.moveClock())),e.on("stretch",()=>this.live.forEach(n=>n.setStretch())),ps(()=>this.live.forEach(n=>n.rebuild())),new ResizeObserver(()=>this.live.forEach(n=>n.resize())).observe(document.body)}add(t,e,n,s){let r=document.createElement("figure");r.className="plot";let o=document.createElement("figcaption"),a=document.createElement("span");a.className="name",a.textContent=n,a.title=s;let l=document.createElement("span");l.className="value",o.append(a,l);let c=document.createElement("div");return c.className="box",r.append(o,c),r.waiting={lines:e,value:l,box:c,title:n},t.append(r),this.watcher.observe(r),r}clear(t){for(let e of[...this.live])t.contains(e.box)&&this.#i(e);t.replaceChildren()}buildForPaper(){[...document.querySelectorAll("figure.plot")].filter(e=>e.waiting).forEach(e=>this.#t(e)),this.live.forEach(e=>e.chart.setSize({width:o_,height:bh}))}#e(t){for(let e of t)e.isIntersecting&&e.target.waiting&&this.#t(e.target)}#t(t){let{lines:e,value:n,box:s,title:r}=t.waiting;t.waiting=void 0,this.watcher.unobserve(t),this.live.add(new wh(this.trial,this.clock,e,n,s,r))}#i(t){this.live.delete(t),t.chart.destroy()}};function Ua(i,{dashed:t=!1}={}){return{column:i,colour:`side-${i.side}`,dashed:t}}var wh=class{constructor(t,e,n,s,r,o){Object.assign(this,{trial:t,clock:e,lines:n,value:s,box:r,title:o}),this.rebuild()}rebuild(){this.chart?.destroy(),this.line=void 0,this.chart=new dn(this.#t(),this.#e(),this.box),this.line=document.createElement("div"),this.line.className="clock",this.chart.over.append(this.line),this.#o(),this.setStretch(),this.moveClock()}resize(){let t=this.box.clientWidth;t&&t!==this.chart.width&&this.chart.setSize({width:t,height:bh}),this.moveClock()}setStretch(){let{time:t,first:e,last:n}=this.clock;this.chart.setScale("x",{min:t[e],max:t[n]}),this.moveClock()}moveClock(){if(!this.line)return;let{row:t,time:e}=this.clock,n=this.chart.valToPos(e[t],"x");this.line.style.transform=`translateX(${n}px)`,this.value.replaceChildren(...this.lines.map(s=>{let r=document.createElement("span"),{value:o,sd:a,unit:l}=s.column,c=Mh*a[t],f=Number.isFinite(c)?` \xB1${Hc(c,l)}`:" (not determined)";return r.textContent=`${Hc(o[t],l)}${f}`,this.lines.length>1&&(r.className=`of-${s.column.side}`),r}))}#e(){let t=[this.trial.time];for(let{column:e}of this.lines){let n=e.value.map((r,o)=>r-Mh*e.sd[o]),s=e.value.map((r,o)=>r+Mh*e.sd[o]);t.push(...[e.value,s,n].map(c_))}return t}#t(){let t={stroke:xe("soft"),font:a_,grid:{stroke:xe("rule"),width:1},ticks:{stroke:xe("rule"),width:1,size:4}},e=[{}],n=[];return this.lines.forEach(({column:s,colour:r,dashed:o},a)=>{let l=s.sd.some(Number.isFinite),c=xe(l?r:"soft"),f=o||!l?[6,4]:void 0;e.push({stroke:c,width:1.6,dash:f,points:{show:!1}});let u={stroke:"transparent",width:0,points:{show:!1}};e.push(u,u),n.push({series:[3*a+2,3*a+3],fill:`${c}33`})}),{width:this.box.clientWidth||300,height:bh,legend:{show:!1},cursor:{show:!1},scales:{x:{time:!1},y:{range:(s,r,o)=>this.#i(r,o)}},axes:[{...t,size:26,values:(s,r)=>r.map((o,a)=>a===r.length-1?`${o} s`:o)},{...t,size:46,space:26}],series:e,bands:n,hooks:{draw:[s=>this.#r(s),()=>this.moveClock()]}}}#i(t,e){if(!(t<=e))return[-1,1];let n=this.lines[0].column.unit==="deg"?4:.02,s=Math.max(.06*(e-t),(n-(e-t))/2,0);for(let r of this.#n()){let o=l_*Math.max(e-t,n);r>e&&r<e+o&&(e=r),r<t&&r>t-o&&(t=r)}return[t-s,e+s]}#n(){let t=this.lines.flatMap(({column:e})=>[e.lower,e.upper]);return[...new Set(t)].filter(e=>e!==null)}#r(t){let{ctx:e,bbox:n}=t;e.save(),e.strokeStyle=xe("look"),e.lineWidth=devicePixelRatio,e.setLineDash([2*devicePixelRatio,3*devicePixelRatio]);let{min:s,max:r}=t.scales.y;for(let o of this.#n()){if(o<s||o>r)continue;let a=t.valToPos(o,"y",!0);e.beginPath(),e.moveTo(n.left,a),e.lineTo(n.left+n.width,a),e.stroke()}e.setLineDash([]),e.fillStyle=xe("look");for(let{column:o}of this.lines)this.#s(t,o);e.restore()}#s(t,e){let{ctx:n,bbox:s}=t,{time:r,rows:o}=this.trial;for(let a=this.clock.first;a<=this.clock.last;a++){if(!e.atLimit[a])continue;let l=t.valToPos(r[a],"x",!0),c=t.valToPos(r[Math.min(a+1,o-1)],"x",!0),f=4*devicePixelRatio;n.fillRect(l,s.top+s.height-f,Math.max(c-l,1),f)}}#o(){let t=this.chart.over,e=n=>{let s=n.clientX-t.getBoundingClientRect().left;this.clock.show(this.clock.rowAt(this.chart.posToVal(s,"x")))};t.addEventListener("pointerdown",n=>{t.setPointerCapture(n.pointerId),e(n)}),t.addEventListener("pointermove",n=>n.buttons&&e(n))}},c_=i=>Array.from(i,t=>Number.isFinite(t)?t:null);var Cs={LEFT:0,MIDDLE:1,RIGHT:2,ROTATE:0,DOLLY:1,PAN:2},Ps={ROTATE:0,PAN:1,DOLLY_PAN:2,DOLLY_ROTATE:3},dp=0,jh=1,pp=2;var ta=1,mp=2,Qr=3,Is=0,Gn=1,mi=2,Ks=0,to=1,Qh=2,tu=3,eu=4,gp=5;var js=100,_p=101,xp=102,yp=103,vp=104,Sp=200,Mp=201,bp=202,wp=203,nu=204,iu=205,Ep=206,Tp=207,Ap=208,Rp=209,Cp=210,Pp=211,Ip=212,Lp=213,Dp=214,rl=0,ol=1,al=2,zr=3,ll=4,cl=5,hl=6,ul=7,Nl=0,Np=1,Up=2,zi=0,su=1,ru=2,ou=3,au=4,lu=5,cu=6,hu=7;var uu=300,Qs=301,eo=302,Ul=303,Fl=304,fl=1e3,ki=1001,dl=1002,wn=1003,Fp=1004;var ea=1005;var zn=1006,Ol=1007;var rs=1008;var Xn=1009,fu=1010,du=1011,no=1012,Bl=1013,Ai=1014,gi=1015,Ri=1016,kl=1017,zl=1018,tr=1020,pu=35902,mu=35899,gu=1021,_u=1022,Ci=1023,ns=1026,os=1027,Vl=1028,Gl=1029,Ls=1030,Hl=1031;var Wl=1033,na=33776,ia=33777,sa=33778,ra=33779,Xl=35840,ql=35841,Yl=35842,Zl=35843,$l=36196,Jl=37492,Kl=37496,jl=37488,Ql=37489,oa=37490,tc=37491,ec=37808,nc=37809,ic=37810,sc=37811,rc=37812,oc=37813,ac=37814,lc=37815,cc=37816,hc=37817,uc=37818,fc=37819,dc=37820,pc=37821,mc=36492,gc=36494,_c=36495,xc=36283,yc=36284,aa=36285,vc=36286;var No=2300,pl=2301,il=2302,Xh=2303,qh=2400,Yh=2401,Zh=2402;var Op=3200;var Sc=0,Bp=1,as="",ii="srgb",Uo="srgb-linear",Fo="linear",Te="srgb";var sl=7680;var kp=519,zp=512,Vp=513,Gp=514,xu=515,Hp=516,Wp=517,yu=518,vu=519,Xp=35044;var Su="300 es",ui=2e3,Vr=2001;function h_(i){for(let t=i.length-1;t>=0;--t)if(i[t]>=65535)return!0;return!1}function u_(i){return ArrayBuffer.isView(i)&&!(i instanceof DataView)}function Oo(i){return document.createElementNS("http://www.w3.org/1999/xhtml",i)}function qp(){let i=Oo("canvas");return i.style.display="block",i}var Vd={},Gr=null;function Mu(...i){let t="THREE."+i.shift();Gr?Gr("log",t,...i):console.log(t,...i)}function Yp(i){let t=i[0];if(typeof t=="string"&&t.startsWith("TSL:")){let e=i[1];e&&e.isStackTrace?i[0]+=" "+e.getLocation():i[1]='Stack trace not available. Enable "THREE.Node.captureStackTrace" to capture stack traces.'}return i}function qt(...i){i=Yp(i);let t="THREE."+i.shift();if(Gr)Gr("warn",t,...i);else{let e=i[0];e&&e.isStackTrace?console.warn(e.getError(t)):console.warn(t,...i)}}function jt(...i){i=Yp(i);let t="THREE."+i.shift();if(Gr)Gr("error",t,...i);else{let e=i[0];e&&e.isStackTrace?console.error(e.getError(t)):console.error(t,...i)}}function Io(...i){let t=i.join(" ");t in Vd||(Vd[t]=!0,qt(...i))}function Zp(i,t,e){return new Promise(function(n,s){function r(){switch(i.clientWaitSync(t,i.SYNC_FLUSH_COMMANDS_BIT,0)){case i.WAIT_FAILED:s();break;case i.TIMEOUT_EXPIRED:setTimeout(r,e);break;default:n()}}setTimeout(r,e)})}var $p={[rl]:rl,[al]:hl,[ll]:ll,[zr]:cl,[ol]:ol,[hl]:al,[ul]:ul,[cl]:zr},Ti=class{addEventListener(t,e){this._listeners===void 0&&(this._listeners={});let n=this._listeners;n[t]===void 0&&(n[t]=[]),n[t].indexOf(e)===-1&&n[t].push(e)}hasEventListener(t,e){let n=this._listeners;return n===void 0?!1:n[t]!==void 0&&n[t].indexOf(e)!==-1}removeEventListener(t,e){let n=this._listeners;if(n===void 0)return;let s=n[t];if(s!==void 0){let r=s.indexOf(e);r!==-1&&s.splice(r,1)}}dispatchEvent(t){let e=this._listeners;if(e===void 0)return;let n=e[t.type];if(n!==void 0){t.target=this;let s=n.slice(0);for(let r=0,o=s.length;r<o;r++)s[r].call(this,t);t.target=null}}},An=["00","01","02","03","04","05","06","07","08","09","0a","0b","0c","0d","0e","0f","10","11","12","13","14","15","16","17","18","19","1a","1b","1c","1d","1e","1f","20","21","22","23","24","25","26","27","28","29","2a","2b","2c","2d","2e","2f","30","31","32","33","34","35","36","37","38","39","3a","3b","3c","3d","3e","3f","40","41","42","43","44","45","46","47","48","49","4a","4b","4c","4d","4e","4f","50","51","52","53","54","55","56","57","58","59","5a","5b","5c","5d","5e","5f","60","61","62","63","64","65","66","67","68","69","6a","6b","6c","6d","6e","6f","70","71","72","73","74","75","76","77","78","79","7a","7b","7c","7d","7e","7f","80","81","82","83","84","85","86","87","88","89","8a","8b","8c","8d","8e","8f","90","91","92","93","94","95","96","97","98","99","9a","9b","9c","9d","9e","9f","a0","a1","a2","a3","a4","a5","a6","a7","a8","a9","aa","ab","ac","ad","ae","af","b0","b1","b2","b3","b4","b5","b6","b7","b8","b9","ba","bb","bc","bd","be","bf","c0","c1","c2","c3","c4","c5","c6","c7","c8","c9","ca","cb","cc","cd","ce","cf","d0","d1","d2","d3","d4","d5","d6","d7","d8","d9","da","db","dc","dd","de","df","e0","e1","e2","e3","e4","e5","e6","e7","e8","e9","ea","eb","ec","ed","ee","ef","f0","f1","f2","f3","f4","f5","f6","f7","f8","f9","fa","fb","fc","fd","fe","ff"],Gd=1234567,Lo=Math.PI/180,Hr=180/Math.PI;function io(){let i=Math.random()*4294967295|0,t=Math.random()*4294967295|0,e=Math.random()*4294967295|0,n=Math.random()*4294967295|0;return(An[i&255]+An[i>>8&255]+An[i>>16&255]+An[i>>24&255]+"-"+An[t&255]+An[t>>8&255]+"-"+An[t>>16&15|64]+An[t>>24&255]+"-"+An[e&63|128]+An[e>>8&255]+"-"+An[e>>16&255]+An[e>>24&255]+An[n&255]+An[n>>8&255]+An[n>>16&255]+An[n>>24&255]).toLowerCase()}function fe(i,t,e){return Math.max(t,Math.min(e,i))}function bu(i,t){return(i%t+t)%t}function f_(i,t,e,n,s){return n+(i-t)*(s-n)/(e-t)}function d_(i,t,e){return i!==t?(e-i)/(t-i):0}function Do(i,t,e){return(1-e)*i+e*t}function p_(i,t,e,n){return Do(i,t,1-Math.exp(-e*n))}function m_(i,t=1){return t-Math.abs(bu(i,t*2)-t)}function g_(i,t,e){return i<=t?0:i>=e?1:(i=(i-t)/(e-t),i*i*(3-2*i))}function __(i,t,e){return i<=t?0:i>=e?1:(i=(i-t)/(e-t),i*i*i*(i*(i*6-15)+10))}function x_(i,t){return i+Math.floor(Math.random()*(t-i+1))}function y_(i,t){return i+Math.random()*(t-i)}function v_(i){return i*(.5-Math.random())}function S_(i){i!==void 0&&(Gd=i);let t=Gd+=1831565813;return t=Math.imul(t^t>>>15,t|1),t^=t+Math.imul(t^t>>>7,t|61),((t^t>>>14)>>>0)/4294967296}function M_(i){return i*Lo}function b_(i){return i*Hr}function w_(i){return i>0&&Number.isInteger(i)&&2**Math.round(Math.log2(i))===i}function E_(i){return Math.pow(2,Math.ceil(Math.log(i)/Math.LN2))}function wu(i){return Math.pow(2,Math.floor(Math.log(i)/Math.LN2))}function T_(i,t,e,n,s){let r=Math.cos,o=Math.sin,a=r(e/2),l=o(e/2),c=r((t+n)/2),f=o((t+n)/2),u=r((t-n)/2),h=o((t-n)/2),p=r((n-t)/2),x=o((n-t)/2);switch(s){case"XYX":i.set(a*f,l*u,l*h,a*c);break;case"YZY":i.set(l*h,a*f,l*u,a*c);break;case"ZXZ":i.set(l*u,l*h,a*f,a*c);break;case"XZX":i.set(a*f,l*x,l*p,a*c);break;case"YXY":i.set(l*p,a*f,l*x,a*c);break;case"ZYZ":i.set(l*x,l*p,a*f,a*c);break;default:qt("MathUtils: .setQuaternionFromProperEuler() encountered an unknown order: "+s)}}function Eu(i){switch(i.constructor){case Uint32Array:return 4294967295;case Uint16Array:return 65535;case Uint8Array:case Uint8ClampedArray:return 255;case Int32Array:return 2147483647;case Int16Array:return 32767;case Int8Array:return 127;default:return}}function Jp(i,t){if(t.constructor===Float32Array)return i;let e=Eu(t);if(e===void 0)throw new Error("THREE.MathUtils: Invalid component type.");return Math.max(i/e,-1)}function Kp(i,t){if(t.constructor===Float32Array)return i;let e=Eu(t);if(e===void 0)throw new Error("THREE.MathUtils: Invalid component type.");return Math.round(i*e)}var Tu={DEG2RAD:Lo,RAD2DEG:Hr,generateUUID:io,clamp:fe,euclideanModulo:bu,mapLinear:f_,inverseLerp:d_,lerp:Do,damp:p_,pingpong:m_,smoothstep:g_,smootherstep:__,randInt:x_,randFloat:y_,randFloatSpread:v_,seededRandom:S_,degToRad:M_,radToDeg:b_,isPowerOfTwo:w_,ceilPowerOfTwo:E_,floorPowerOfTwo:wu,setQuaternionFromProperEuler:T_,normalize:Kp,denormalize:Jp},Jt=class{static{this.prototype.isVector2=!0}constructor(t=0,e=0){this.x=t,this.y=e}get width(){return this.x}set width(t){this.x=t}get height(){return this.y}set height(t){this.y=t}set(t,e){return this.x=t,this.y=e,this}setScalar(t){return this.x=t,this.y=t,this}setX(t){return this.x=t,this}setY(t){return this.y=t,this}setComponent(t,e){switch(t){case 0:this.x=e;break;case 1:this.y=e;break;default:throw new Error("THREE.Vector2: index is out of range: "+t)}return this}getComponent(t){switch(t){case 0:return this.x;case 1:return this.y;default:throw new Error("THREE.Vector2: index is out of range: "+t)}}clone(){return new this.constructor(this.x,this.y)}copy(t){return this.x=t.x,this.y=t.y,this}add(t){return this.x+=t.x,this.y+=t.y,this}addScalar(t){return this.x+=t,this.y+=t,this}addVectors(t,e){return this.x=t.x+e.x,this.y=t.y+e.y,this}addScaledVector(t,e){return this.x+=t.x*e,this.y+=t.y*e,this}sub(t){return this.x-=t.x,this.y-=t.y,this}subScalar(t){return this.x-=t,this.y-=t,this}subVectors(t,e){return this.x=t.x-e.x,this.y=t.y-e.y,this}multiply(t){return this.x*=t.x,this.y*=t.y,this}multiplyScalar(t){return this.x*=t,this.y*=t,this}divide(t){return this.x/=t.x,this.y/=t.y,this}divideScalar(t){return this.multiplyScalar(1/t)}applyMatrix3(t){let e=this.x,n=this.y,s=t.elements;return this.x=s[0]*e+s[3]*n+s[6],this.y=s[1]*e+s[4]*n+s[7],this}min(t){return this.x=Math.min(this.x,t.x),this.y=Math.min(this.y,t.y),this}max(t){return this.x=Math.max(this.x,t.x),this.y=Math.max(this.y,t.y),this}clamp(t,e){return this.x=fe(this.x,t.x,e.x),this.y=fe(this.y,t.y,e.y),this}clampScalar(t,e){return this.x=fe(this.x,t,e),this.y=fe(this.y,t,e),this}clampLength(t,e){let n=this.length();return this.divideScalar(n||1).multiplyScalar(fe(n,t,e))}floor(){return this.x=Math.floor(this.x),this.y=Math.floor(this.y),this}ceil(){return this.x=Math.ceil(this.x),this.y=Math.ceil(this.y),this}round(){return this.x=Math.round(this.x),this.y=Math.round(this.y),this}roundToZero(){return this.x=Math.trunc(this.x),this.y=Math.trunc(this.y),this}negate(){return this.x=-this.x,this.y=-this.y,this}dot(t){return this.x*t.x+this.y*t.y}cross(t){return this.x*t.y-this.y*t.x}lengthSq(){return this.x*this.x+this.y*this.y}length(){return Math.sqrt(this.x*this.x+this.y*this.y)}manhattanLength(){return Math.abs(this.x)+Math.abs(this.y)}normalize(){return this.divideScalar(this.length()||1)}angle(){return Math.atan2(-this.y,-this.x)+Math.PI}angleTo(t){let e=Math.sqrt(this.lengthSq()*t.lengthSq());if(e===0)return Math.PI/2;let n=this.dot(t)/e;return Math.acos(fe(n,-1,1))}distanceTo(t){return Math.sqrt(this.distanceToSquared(t))}distanceToSquared(t){let e=this.x-t.x,n=this.y-t.y;return e*e+n*n}manhattanDistanceTo(t){return Math.abs(this.x-t.x)+Math.abs(this.y-t.y)}setLength(t){return this.normalize().multiplyScalar(t)}lerp(t,e){return this.x+=(t.x-this.x)*e,this.y+=(t.y-this.y)*e,this}lerpVectors(t,e,n){return this.x=t.x+(e.x-t.x)*n,this.y=t.y+(e.y-t.y)*n,this}equals(t){return t.x===this.x&&t.y===this.y}fromArray(t,e=0){return this.x=t[e],this.y=t[e+1],this}toArray(t=[],e=0){return t[e]=this.x,t[e+1]=this.y,t}fromBufferAttribute(t,e){return this.x=t.getX(e),this.y=t.getY(e),this}rotateAround(t,e){let n=Math.cos(e),s=Math.sin(e),r=this.x-t.x,o=this.y-t.y;return this.x=r*n-o*s+t.x,this.y=r*s+o*n+t.y,this}random(){return this.x=Math.random(),this.y=Math.random(),this}*[Symbol.iterator](){yield this.x,yield this.y}},Cn=class{constructor(t=0,e=0,n=0,s=1){this.isQuaternion=!0,this._x=t,this._y=e,this._z=n,this._w=s}static slerpFlat(t,e,n,s,r,o,a){let l=n[s+0],c=n[s+1],f=n[s+2],u=n[s+3],h=r[o+0],p=r[o+1],x=r[o+2],w=r[o+3];if(u!==w||l!==h||c!==p||f!==x){let m=l*h+c*p+f*x+u*w;m<0&&(h=-h,p=-p,x=-x,w=-w,m=-m);let d=1-a;if(m<.9995){let v=Math.acos(m),C=Math.sin(v);d=Math.sin(d*v)/C,a=Math.sin(a*v)/C,l=l*d+h*a,c=c*d+p*a,f=f*d+x*a,u=u*d+w*a}else{l=l*d+h*a,c=c*d+p*a,f=f*d+x*a,u=u*d+w*a;let v=1/Math.sqrt(l*l+c*c+f*f+u*u);l*=v,c*=v,f*=v,u*=v}}t[e]=l,t[e+1]=c,t[e+2]=f,t[e+3]=u}static multiplyQuaternionsFlat(t,e,n,s,r,o){let a=n[s],l=n[s+1],c=n[s+2],f=n[s+3],u=r[o],h=r[o+1],p=r[o+2],x=r[o+3];return t[e]=a*x+f*u+l*p-c*h,t[e+1]=l*x+f*h+c*u-a*p,t[e+2]=c*x+f*p+a*h-l*u,t[e+3]=f*x-a*u-l*h-c*p,t}get x(){return this._x}set x(t){this._x=t,this._onChangeCallback()}get y(){return this._y}set y(t){this._y=t,this._onChangeCallback()}get z(){return this._z}set z(t){this._z=t,this._onChangeCallback()}get w(){return this._w}set w(t){this._w=t,this._onChangeCallback()}set(t,e,n,s){return this._x=t,this._y=e,this._z=n,this._w=s,this._onChangeCallback(),this}clone(){return new this.constructor(this._x,this._y,this._z,this._w)}copy(t){return this._x=t.x,this._y=t.y,this._z=t.z,this._w=t.w,this._onChangeCallback(),this}setFromEuler(t,e=!0){let n=t._x,s=t._y,r=t._z,o=t._order,a=Math.cos,l=Math.sin,c=a(n/2),f=a(s/2),u=a(r/2),h=l(n/2),p=l(s/2),x=l(r/2);switch(o){case"XYZ":this._x=h*f*u+c*p*x,this._y=c*p*u-h*f*x,this._z=c*f*x+h*p*u,this._w=c*f*u-h*p*x;break;case"YXZ":this._x=h*f*u+c*p*x,this._y=c*p*u-h*f*x,this._z=c*f*x-h*p*u,this._w=c*f*u+h*p*x;break;case"ZXY":this._x=h*f*u-c*p*x,this._y=c*p*u+h*f*x,this._z=c*f*x+h*p*u,this._w=c*f*u-h*p*x;break;case"ZYX":this._x=h*f*u-c*p*x,this._y=c*p*u+h*f*x,this._z=c*f*x-h*p*u,this._w=c*f*u+h*p*x;break;case"YZX":this._x=h*f*u+c*p*x,this._y=c*p*u+h*f*x,this._z=c*f*x-h*p*u,this._w=c*f*u-h*p*x;break;case"XZY":this._x=h*f*u-c*p*x,this._y=c*p*u-h*f*x,this._z=c*f*x+h*p*u,this._w=c*f*u+h*p*x;break;default:qt("Quaternion: .setFromEuler() encountered an unknown order: "+o)}return e===!0&&this._onChangeCallback(),this}setFromAxisAngle(t,e){let n=e/2,s=Math.sin(n);return this._x=t.x*s,this._y=t.y*s,this._z=t.z*s,this._w=Math.cos(n),this._onChangeCallback(),this}setFromRotationMatrix(t){let e=t.elements,n=e[0],s=e[4],r=e[8],o=e[1],a=e[5],l=e[9],c=e[2],f=e[6],u=e[10],h=n+a+u;if(h>0){let p=.5/Math.sqrt(h+1);this._w=.25/p,this._x=(f-l)*p,this._y=(r-c)*p,this._z=(o-s)*p}else if(n>a&&n>u){let p=2*Math.sqrt(1+n-a-u);this._w=(f-l)/p,this._x=.25*p,this._y=(s+o)/p,this._z=(r+c)/p}else if(a>u){let p=2*Math.sqrt(1+a-n-u);this._w=(r-c)/p,this._x=(s+o)/p,this._y=.25*p,this._z=(l+f)/p}else{let p=2*Math.sqrt(1+u-n-a);this._w=(o-s)/p,this._x=(r+c)/p,this._y=(l+f)/p,this._z=.25*p}return this._onChangeCallback(),this}setFromUnitVectors(t,e){let n=t.dot(e)+1;return n<1e-8?(n=0,Math.abs(t.x)>Math.abs(t.z)?(this._x=-t.y,this._y=t.x,this._z=0,this._w=n):(this._x=0,this._y=-t.z,this._z=t.y,this._w=n)):(this._x=t.y*e.z-t.z*e.y,this._y=t.z*e.x-t.x*e.z,this._z=t.x*e.y-t.y*e.x,this._w=n),this.normalize()}angleTo(t){return 2*Math.acos(Math.abs(fe(this.dot(t),-1,1)))}rotateTowards(t,e){let n=this.angleTo(t);if(n===0)return this;let s=Math.min(1,e/n);return this.slerp(t,s),this}identity(){return this.set(0,0,0,1)}invert(){return this.conjugate()}conjugate(){return this._x*=-1,this._y*=-1,this._z*=-1,this._onChangeCallback(),this}dot(t){return this._x*t._x+this._y*t._y+this._z*t._z+this._w*t._w}lengthSq(){return this._x*this._x+this._y*this._y+this._z*this._z+this._w*this._w}length(){return Math.sqrt(this._x*this._x+this._y*this._y+this._z*this._z+this._w*this._w)}normalize(){let t=this.length();return t===0?(this._x=0,this._y=0,this._z=0,this._w=1):(t=1/t,this._x=this._x*t,this._y=this._y*t,this._z=this._z*t,this._w=this._w*t),this._onChangeCallback(),this}multiply(t){return this.multiplyQuaternions(this,t)}premultiply(t){return this.multiplyQuaternions(t,this)}multiplyQuaternions(t,e){let n=t._x,s=t._y,r=t._z,o=t._w,a=e._x,l=e._y,c=e._z,f=e._w;return this._x=n*f+o*a+s*c-r*l,this._y=s*f+o*l+r*a-n*c,this._z=r*f+o*c+n*l-s*a,this._w=o*f-n*a-s*l-r*c,this._onChangeCallback(),this}slerp(t,e){let n=t._x,s=t._y,r=t._z,o=t._w,a=this.dot(t);a<0&&(n=-n,s=-s,r=-r,o=-o,a=-a);let l=1-e;if(a<.9995){let c=Math.acos(a),f=Math.sin(c);l=Math.sin(l*c)/f,e=Math.sin(e*c)/f,this._x=this._x*l+n*e,this._y=this._y*l+s*e,this._z=this._z*l+r*e,this._w=this._w*l+o*e,this._onChangeCallback()}else this._x=this._x*l+n*e,this._y=this._y*l+s*e,this._z=this._z*l+r*e,this._w=this._w*l+o*e,this.normalize();return this}slerpQuaternions(t,e,n){return this.copy(t).slerp(e,n)}random(){let t=2*Math.PI*Math.random(),e=2*Math.PI*Math.random(),n=Math.random(),s=Math.sqrt(1-n),r=Math.sqrt(n);return this.set(s*Math.sin(t),s*Math.cos(t),r*Math.sin(e),r*Math.cos(e))}equals(t){return t._x===this._x&&t._y===this._y&&t._z===this._z&&t._w===this._w}fromArray(t,e=0){return this._x=t[e],this._y=t[e+1],this._z=t[e+2],this._w=t[e+3],this._onChangeCallback(),this}toArray(t=[],e=0){return t[e]=this._x,t[e+1]=this._y,t[e+2]=this._z,t[e+3]=this._w,t}fromBufferAttribute(t,e){return this._x=t.getX(e),this._y=t.getY(e),this._z=t.getZ(e),this._w=t.getW(e),this._onChangeCallback(),this}toJSON(){return this.toArray()}_onChange(t){return this._onChangeCallback=t,this}_onChangeCallback(){}*[Symbol.iterator](){yield this._x,yield this._y,yield this._z,yield this._w}},W=class{static{this.prototype.isVector3=!0}constructor(t=0,e=0,n=0){this.x=t,this.y=e,this.z=n}set(t,e,n){return n===void 0&&(n=this.z),this.x=t,this.y=e,this.z=n,this}setScalar(t){return this.x=t,this.y=t,this.z=t,this}setX(t){return this.x=t,this}setY(t){return this.y=t,this}setZ(t){return this.z=t,this}setComponent(t,e){switch(t){case 0:this.x=e;break;case 1:this.y=e;break;case 2:this.z=e;break;default:throw new Error("THREE.Vector3: index is out of range: "+t)}return this}getComponent(t){switch(t){case 0:return this.x;case 1:return this.y;case 2:return this.z;default:throw new Error("THREE.Vector3: index is out of range: "+t)}}clone(){return new this.constructor(this.x,this.y,this.z)}copy(t){return this.x=t.x,this.y=t.y,this.z=t.z,this}add(t){return this.x+=t.x,this.y+=t.y,this.z+=t.z,this}addScalar(t){return this.x+=t,this.y+=t,this.z+=t,this}addVectors(t,e){return this.x=t.x+e.x,this.y=t.y+e.y,this.z=t.z+e.z,this}addScaledVector(t,e){return this.x+=t.x*e,this.y+=t.y*e,this.z+=t.z*e,this}sub(t){return this.x-=t.x,this.y-=t.y,this.z-=t.z,this}subScalar(t){return this.x-=t,this.y-=t,this.z-=t,this}subVectors(t,e){return this.x=t.x-e.x,this.y=t.y-e.y,this.z=t.z-e.z,this}multiply(t){return this.x*=t.x,this.y*=t.y,this.z*=t.z,this}multiplyScalar(t){return this.x*=t,this.y*=t,this.z*=t,this}multiplyVectors(t,e){return this.x=t.x*e.x,this.y=t.y*e.y,this.z=t.z*e.z,this}applyEuler(t){return this.applyQuaternion(Hd.setFromEuler(t))}applyAxisAngle(t,e){return this.applyQuaternion(Hd.setFromAxisAngle(t,e))}applyMatrix3(t){let e=this.x,n=this.y,s=this.z,r=t.elements;return this.x=r[0]*e+r[3]*n+r[6]*s,this.y=r[1]*e+r[4]*n+r[7]*s,this.z=r[2]*e+r[5]*n+r[8]*s,this}applyNormalMatrix(t){return this.applyMatrix3(t).normalize()}applyMatrix4(t){let e=this.x,n=this.y,s=this.z,r=t.elements,o=1/(r[3]*e+r[7]*n+r[11]*s+r[15]);return this.x=(r[0]*e+r[4]*n+r[8]*s+r[12])*o,this.y=(r[1]*e+r[5]*n+r[9]*s+r[13])*o,this.z=(r[2]*e+r[6]*n+r[10]*s+r[14])*o,this}applyQuaternion(t){let e=this.x,n=this.y,s=this.z,r=t.x,o=t.y,a=t.z,l=t.w,c=2*(o*s-a*n),f=2*(a*e-r*s),u=2*(r*n-o*e);return this.x=e+l*c+o*u-a*f,this.y=n+l*f+a*c-r*u,this.z=s+l*u+r*f-o*c,this}project(t){return this.applyMatrix4(t.matrixWorldInverse).applyMatrix4(t.projectionMatrix)}unproject(t){return this.applyMatrix4(t.projectionMatrixInverse).applyMatrix4(t.matrixWorld)}transformDirection(t){let e=this.x,n=this.y,s=this.z,r=t.elements;return this.x=r[0]*e+r[4]*n+r[8]*s,this.y=r[1]*e+r[5]*n+r[9]*s,this.z=r[2]*e+r[6]*n+r[10]*s,this.normalize()}divide(t){return this.x/=t.x,this.y/=t.y,this.z/=t.z,this}divideScalar(t){return this.multiplyScalar(1/t)}min(t){return this.x=Math.min(this.x,t.x),this.y=Math.min(this.y,t.y),this.z=Math.min(this.z,t.z),this}max(t){return this.x=Math.max(this.x,t.x),this.y=Math.max(this.y,t.y),this.z=Math.max(this.z,t.z),this}clamp(t,e){return this.x=fe(this.x,t.x,e.x),this.y=fe(this.y,t.y,e.y),this.z=fe(this.z,t.z,e.z),this}clampScalar(t,e){return this.x=fe(this.x,t,e),this.y=fe(this.y,t,e),this.z=fe(this.z,t,e),this}clampLength(t,e){let n=this.length();return this.divideScalar(n||1).multiplyScalar(fe(n,t,e))}floor(){return this.x=Math.floor(this.x),this.y=Math.floor(this.y),this.z=Math.floor(this.z),this}ceil(){return this.x=Math.ceil(this.x),this.y=Math.ceil(this.y),this.z=Math.ceil(this.z),this}round(){return this.x=Math.round(this.x),this.y=Math.round(this.y),this.z=Math.round(this.z),this}roundToZero(){return this.x=Math.trunc(this.x),this.y=Math.trunc(this.y),this.z=Math.trunc(this.z),this}negate(){return this.x=-this.x,this.y=-this.y,this.z=-this.z,this}dot(t){return this.x*t.x+this.y*t.y+this.z*t.z}lengthSq(){return this.x*this.x+this.y*this.y+this.z*this.z}length(){return Math.sqrt(this.x*this.x+this.y*this.y+this.z*this.z)}manhattanLength(){return Math.abs(this.x)+Math.abs(this.y)+Math.abs(this.z)}normalize(){return this.divideScalar(this.length()||1)}setLength(t){return this.normalize().multiplyScalar(t)}lerp(t,e){return this.x+=(t.x-this.x)*e,this.y+=(t.y-this.y)*e,this.z+=(t.z-this.z)*e,this}lerpVectors(t,e,n){return this.x=t.x+(e.x-t.x)*n,this.y=t.y+(e.y-t.y)*n,this.z=t.z+(e.z-t.z)*n,this}cross(t){return this.crossVectors(this,t)}crossVectors(t,e){let n=t.x,s=t.y,r=t.z,o=e.x,a=e.y,l=e.z;return this.x=s*l-r*a,this.y=r*o-n*l,this.z=n*a-s*o,this}projectOnVector(t){let e=t.lengthSq();if(e===0)return this.set(0,0,0);let n=t.dot(this)/e;return this.copy(t).multiplyScalar(n)}projectOnPlane(t){return Eh.copy(this).projectOnVector(t),this.sub(Eh)}reflect(t){return this.sub(Eh.copy(t).multiplyScalar(2*this.dot(t)))}angleTo(t){let e=Math.sqrt(this.lengthSq()*t.lengthSq());if(e===0)return Math.PI/2;let n=this.dot(t)/e;return Math.acos(fe(n,-1,1))}distanceTo(t){return Math.sqrt(this.distanceToSquared(t))}distanceToSquared(t){let e=this.x-t.x,n=this.y-t.y,s=this.z-t.z;return e*e+n*n+s*s}manhattanDistanceTo(t){return Math.abs(this.x-t.x)+Math.abs(this.y-t.y)+Math.abs(this.z-t.z)}setFromSpherical(t){return this.setFromSphericalCoords(t.radius,t.phi,t.theta)}setFromSphericalCoords(t,e,n){let s=Math.sin(e)*t;return this.x=s*Math.sin(n),this.y=Math.cos(e)*t,this.z=s*Math.cos(n),this}setFromCylindrical(t){return this.setFromCylindricalCoords(t.radius,t.theta,t.y)}setFromCylindricalCoords(t,e,n){return this.x=t*Math.sin(e),this.y=n,this.z=t*Math.cos(e),this}setFromMatrixPosition(t){let e=t.elements;return this.x=e[12],this.y=e[13],this.z=e[14],this}setFromMatrixScale(t){let e=this.setFromMatrixColumn(t,0).length(),n=this.setFromMatrixColumn(t,1).length(),s=this.setFromMatrixColumn(t,2).length();return this.x=e,this.y=n,this.z=s,this}setFromMatrixColumn(t,e){return this.fromArray(t.elements,e*4)}setFromMatrix3Column(t,e){return this.fromArray(t.elements,e*3)}setFromEuler(t){return this.x=t._x,this.y=t._y,this.z=t._z,this}setFromColor(t){return this.x=t.r,this.y=t.g,this.z=t.b,this}equals(t){return t.x===this.x&&t.y===this.y&&t.z===this.z}fromArray(t,e=0){return this.x=t[e],this.y=t[e+1],this.z=t[e+2],this}toArray(t=[],e=0){return t[e]=this.x,t[e+1]=this.y,t[e+2]=this.z,t}fromBufferAttribute(t,e){return this.x=t.getX(e),this.y=t.getY(e),this.z=t.getZ(e),this}random(){return this.x=Math.random(),this.y=Math.random(),this.z=Math.random(),this}randomDirection(){let t=Math.random()*Math.PI*2,e=Math.random()*2-1,n=Math.sqrt(1-e*e);return this.x=n*Math.cos(t),this.y=e,this.z=n*Math.sin(t),this}*[Symbol.iterator](){yield this.x,yield this.y,yield this.z}},Eh=new W,Hd=new Cn,Qt=class{static{this.prototype.isMatrix3=!0}constructor(t,e,n,s,r,o,a,l,c){this.elements=[1,0,0,0,1,0,0,0,1],t!==void 0&&this.set(t,e,n,s,r,o,a,l,c)}set(t,e,n,s,r,o,a,l,c){let f=this.elements;return f[0]=t,f[1]=s,f[2]=a,f[3]=e,f[4]=r,f[5]=l,f[6]=n,f[7]=o,f[8]=c,this}identity(){return this.set(1,0,0,0,1,0,0,0,1),this}copy(t){let e=this.elements,n=t.elements;return e[0]=n[0],e[1]=n[1],e[2]=n[2],e[3]=n[3],e[4]=n[4],e[5]=n[5],e[6]=n[6],e[7]=n[7],e[8]=n[8],this}extractBasis(t,e,n){return t.setFromMatrix3Column(this,0),e.setFromMatrix3Column(this,1),n.setFromMatrix3Column(this,2),this}setFromMatrix4(t){let e=t.elements;return this.set(e[0],e[4],e[8],e[1],e[5],e[9],e[2],e[6],e[10]),this}multiply(t){return this.multiplyMatrices(this,t)}premultiply(t){return this.multiplyMatrices(t,this)}multiplyMatrices(t,e){let n=t.elements,s=e.elements,r=this.elements,o=n[0],a=n[3],l=n[6],c=n[1],f=n[4],u=n[7],h=n[2],p=n[5],x=n[8],w=s[0],m=s[3],d=s[6],v=s[1],C=s[4],M=s[7],P=s[2],T=s[5],_=s[8];return r[0]=o*w+a*v+l*P,r[3]=o*m+a*C+l*T,r[6]=o*d+a*M+l*_,r[1]=c*w+f*v+u*P,r[4]=c*m+f*C+u*T,r[7]=c*d+f*M+u*_,r[2]=h*w+p*v+x*P,r[5]=h*m+p*C+x*T,r[8]=h*d+p*M+x*_,this}multiplyScalar(t){let e=this.elements;return e[0]*=t,e[3]*=t,e[6]*=t,e[1]*=t,e[4]*=t,e[7]*=t,e[2]*=t,e[5]*=t,e[8]*=t,this}determinant(){let t=this.elements,e=t[0],n=t[1],s=t[2],r=t[3],o=t[4],a=t[5],l=t[6],c=t[7],f=t[8];return e*o*f-e*a*c-n*r*f+n*a*l+s*r*c-s*o*l}invert(){let t=this.elements,e=t[0],n=t[1],s=t[2],r=t[3],o=t[4],a=t[5],l=t[6],c=t[7],f=t[8],u=f*o-a*c,h=a*l-f*r,p=c*r-o*l,x=e*u+n*h+s*p;if(x===0)return this.set(0,0,0,0,0,0,0,0,0);let w=1/x;return t[0]=u*w,t[1]=(s*c-f*n)*w,t[2]=(a*n-s*o)*w,t[3]=h*w,t[4]=(f*e-s*l)*w,t[5]=(s*r-a*e)*w,t[6]=p*w,t[7]=(n*l-c*e)*w,t[8]=(o*e-n*r)*w,this}transpose(){let t,e=this.elements;return t=e[1],e[1]=e[3],e[3]=t,t=e[2],e[2]=e[6],e[6]=t,t=e[5],e[5]=e[7],e[7]=t,this}getNormalMatrix(t){return this.setFromMatrix4(t).invert().transpose()}transposeIntoArray(t){let e=this.elements;return t[0]=e[0],t[1]=e[3],t[2]=e[6],t[3]=e[1],t[4]=e[4],t[5]=e[7],t[6]=e[2],t[7]=e[5],t[8]=e[8],this}setUvTransform(t,e,n,s,r,o,a){let l=Math.cos(r),c=Math.sin(r);return this.set(n*l,n*c,-n*(l*o+c*a)+o+t,-s*c,s*l,-s*(-c*o+l*a)+a+e,0,0,1),this}scale(t,e){return Io("Matrix3: .scale() is deprecated. Use .makeScale() instead."),this.premultiply(Th.makeScale(t,e)),this}rotate(t){return Io("Matrix3: .rotate() is deprecated. Use .makeRotation() instead."),this.premultiply(Th.makeRotation(-t)),this}translate(t,e){return Io("Matrix3: .translate() is deprecated. Use .makeTranslation() instead."),this.premultiply(Th.makeTranslation(t,e)),this}makeTranslation(t,e){return t.isVector2?this.set(1,0,t.x,0,1,t.y,0,0,1):this.set(1,0,t,0,1,e,0,0,1),this}makeRotation(t){let e=Math.cos(t),n=Math.sin(t);return this.set(e,-n,0,n,e,0,0,0,1),this}makeScale(t,e){return this.set(t,0,0,0,e,0,0,0,1),this}equals(t){let e=this.elements,n=t.elements;for(let s=0;s<9;s++)if(e[s]!==n[s])return!1;return!0}fromArray(t,e=0){for(let n=0;n<9;n++)this.elements[n]=t[n+e];return this}toArray(t=[],e=0){let n=this.elements;return t[e]=n[0],t[e+1]=n[1],t[e+2]=n[2],t[e+3]=n[3],t[e+4]=n[4],t[e+5]=n[5],t[e+6]=n[6],t[e+7]=n[7],t[e+8]=n[8],t}clone(){return new this.constructor().fromArray(this.elements)}},Th=new Qt,Wd=new Qt().set(.4123908,.3575843,.1804808,.212639,.7151687,.0721923,.0193308,.1191948,.9505322),Xd=new Qt().set(3.2409699,-1.5373832,-.4986108,-.9692436,1.8759675,.0415551,.0556301,-.203977,1.0569715);function A_(){let i={enabled:!0,workingColorSpace:Uo,spaces:{},convert:function(s,r,o){return this.enabled===!1||r===o||!r||!o||(this.spaces[r].transfer===Te&&(s.r=es(s.r),s.g=es(s.g),s.b=es(s.b)),this.spaces[r].primaries!==this.spaces[o].primaries&&(s.applyMatrix3(this.spaces[r].toXYZ),s.applyMatrix3(this.spaces[o].fromXYZ)),this.spaces[o].transfer===Te&&(s.r=kr(s.r),s.g=kr(s.g),s.b=kr(s.b))),s},workingToColorSpace:function(s,r){return this.convert(s,this.workingColorSpace,r)},colorSpaceToWorking:function(s,r){return this.convert(s,r,this.workingColorSpace)},getPrimaries:function(s){return this.spaces[s].primaries},getTransfer:function(s){return s===as?Fo:this.spaces[s].transfer},getToneMappingMode:function(s){return this.spaces[s].outputColorSpaceConfig.toneMappingMode||"standard"},getLuminanceCoefficients:function(s,r=this.workingColorSpace){return s.fromArray(this.spaces[r].luminanceCoefficients)},define:function(s){Object.assign(this.spaces,s)},_getMatrix:function(s,r,o){return s.copy(this.spaces[o].fromXYZ).multiply(this.spaces[r].toXYZ)},_getDrawingBufferColorSpace:function(s){return this.spaces[s].outputColorSpaceConfig.drawingBufferColorSpace},_getUnpackColorSpace:function(s=this.workingColorSpace){return this.spaces[s].workingColorSpaceConfig.unpackColorSpace}},t=[.64,.33,.3,.6,.15,.06],e=[.2126,.7152,.0722],n=[.3127,.329];return i.define({[Uo]:{primaries:t,whitePoint:n,transfer:Fo,toXYZ:Wd,fromXYZ:Xd,luminanceCoefficients:e,workingColorSpaceConfig:{unpackColorSpace:ii},outputColorSpaceConfig:{drawingBufferColorSpace:ii}},[ii]:{primaries:t,whitePoint:n,transfer:Te,toXYZ:Wd,fromXYZ:Xd,luminanceCoefficients:e,outputColorSpaceConfig:{drawingBufferColorSpace:ii}}}),i}var ge=A_();function es(i){return i<.04045?i*.0773993808:Math.pow(i*.9478672986+.0521327014,2.4)}function kr(i){return i<.0031308?i*12.92:1.055*Math.pow(i,.41666)-.055}var Er,ml=class{static getDataURL(t,e="image/png"){if(/^data:/i.test(t.src)||typeof HTMLCanvasElement>"u")return t.src;let n;if(t instanceof HTMLCanvasElement)n=t;else{Er===void 0&&(Er=Oo("canvas")),Er.width=t.width,Er.height=t.height;let s=Er.getContext("2d");t instanceof ImageData?s.putImageData(t,0,0):s.drawImage(t,0,0,t.width,t.height),n=Er}return n.toDataURL(e)}static sRGBToLinear(t){if(typeof HTMLImageElement<"u"&&t instanceof HTMLImageElement||typeof HTMLCanvasElement<"u"&&t instanceof HTMLCanvasElement||typeof ImageBitmap<"u"&&t instanceof ImageBitmap){let e=Oo("canvas");e.width=t.width,e.height=t.height;let n=e.getContext("2d");n.drawImage(t,0,0,t.width,t.height);let s=n.getImageData(0,0,t.width,t.height),r=s.data;for(let o=0;o<r.length;o++)r[o]=es(r[o]/255)*255;return n.putImageData(s,0,0),e}else if(t.data){let e=t.data.slice(0);for(let n=0;n<e.length;n++)e instanceof Uint8Array||e instanceof Uint8ClampedArray?e[n]=Math.floor(es(e[n]/255)*255):e[n]=es(e[n]);return{data:e,width:t.width,height:t.height}}else return qt("ImageUtils.sRGBToLinear(): Unsupported image type. No color space conversion applied."),t}},R_=0,Wr=class{constructor(t=null){this.isTextureSource=!0,Object.defineProperty(this,"id",{value:R_++}),this.uuid=io(),this.data=t,this.dataReady=!0,this.version=0}getSize(t){let e=this.data;return typeof HTMLVideoElement<"u"&&e instanceof HTMLVideoElement?t.set(e.videoWidth,e.videoHeight,0):typeof VideoFrame<"u"&&e instanceof VideoFrame?t.set(e.displayWidth,e.displayHeight,0):e!==null?t.set(e.width||0,e.height||0,e.depth||0):t.set(0,0,0),t}set needsUpdate(t){t===!0&&this.version++}toJSON(t){let e=t===void 0||typeof t=="string";if(!e&&t.images[this.uuid]!==void 0)return t.images[this.uuid];let n={uuid:this.uuid,url:""},s=this.data;if(s!==null){let r;if(Array.isArray(s)){r=[];for(let o=0,a=s.length;o<a;o++)s[o].isDataTexture?r.push(Ah(s[o].image)):r.push(Ah(s[o]))}else r=Ah(s);n.url=r}return e||(t.images[this.uuid]=n),n}};function Ah(i){return typeof HTMLImageElement<"u"&&i instanceof HTMLImageElement||typeof HTMLCanvasElement<"u"&&i instanceof HTMLCanvasElement||typeof ImageBitmap<"u"&&i instanceof ImageBitmap?ml.getDataURL(i):i.data?{data:Array.from(i.data),width:i.width,height:i.height,type:i.data.constructor.name}:(qt("Texture: Unable to serialize Texture."),{})}var C_=0,Rh=new W,Wn=class i extends Ti{constructor(t=i.DEFAULT_IMAGE,e=i.DEFAULT_MAPPING,n=ki,s=ki,r=zn,o=rs,a=Ci,l=Xn,c=i.DEFAULT_ANISOTROPY,f=as){super(),this.isTexture=!0,Object.defineProperty(this,"id",{value:C_++}),this.uuid=io(),this.name="",this.source=new Wr(t),this.mipmaps=[],this.mapping=e,this.channel=0,this.wrapS=n,this.wrapT=s,this.magFilter=r,this.minFilter=o,this.anisotropy=c,this.format=a,this.internalFormat=null,this.type=l,this.offset=new Jt(0,0),this.repeat=new Jt(1,1),this.center=new Jt(0,0),this.rotation=0,this.matrixAutoUpdate=!0,this.matrix=new Qt,this.generateMipmaps=!0,this.mipmapsAutoUpdate=!0,this.premultiplyAlpha=!1,this.flipY=!0,this.unpackAlignment=4,this.colorSpace=f,this.userData={},this.updateRanges=[],this.version=0,this.onUpdate=null,this.renderTarget=null,this.isRenderTargetTexture=!1,this.isArrayTexture=!!(t&&t.depth&&t.depth>1),this.pmremVersion=0,this.isPMREMTexture=!1,this.normalized=!1}get width(){return this.source.getSize(Rh).x}get height(){return this.source.getSize(Rh).y}get depth(){return this.source.getSize(Rh).z}get image(){return this.source.data}set image(t){this.source.data=t}updateMatrix(){this.matrix.setUvTransform(this.offset.x,this.offset.y,this.repeat.x,this.repeat.y,this.rotation,this.center.x,this.center.y)}addUpdateRange(t,e){this.updateRanges.push({start:t,count:e})}clearUpdateRanges(){this.updateRanges.length=0}clone(){return new this.constructor().copy(this)}copy(t){return this.name=t.name,this.source=t.source,this.mipmaps=t.mipmaps.slice(0),this.mapping=t.mapping,this.channel=t.channel,this.wrapS=t.wrapS,this.wrapT=t.wrapT,this.magFilter=t.magFilter,this.minFilter=t.minFilter,this.anisotropy=t.anisotropy,this.format=t.format,this.internalFormat=t.internalFormat,this.type=t.type,this.normalized=t.normalized,this.offset.copy(t.offset),this.repeat.copy(t.repeat),this.center.copy(t.center),this.rotation=t.rotation,this.matrixAutoUpdate=t.matrixAutoUpdate,this.matrix.copy(t.matrix),this.generateMipmaps=t.generateMipmaps,this.mipmapsAutoUpdate=t.mipmapsAutoUpdate,this.premultiplyAlpha=t.premultiplyAlpha,this.flipY=t.flipY,this.unpackAlignment=t.unpackAlignment,this.colorSpace=t.colorSpace,this.renderTarget=t.renderTarget,this.isRenderTargetTexture=t.isRenderTargetTexture,this.isPMREMTexture=t.isPMREMTexture,this.isArrayTexture=t.isArrayTexture,this.userData=JSON.parse(JSON.stringify(t.userData)),this.needsUpdate=!0,this}setValues(t){for(let e in t){let n=t[e];if(n===void 0){qt(`Texture.setValues(): parameter '${e}' has value of undefined.`);continue}let s=this[e];if(s===void 0){qt(`Texture.setValues(): property '${e}' does not exist.`);continue}s&&n&&s.isVector2&&n.isVector2||s&&n&&s.isVector3&&n.isVector3||s&&n&&s.isMatrix3&&n.isMatrix3?s.copy(n):this[e]=n}}toJSON(t){let e=t===void 0||typeof t=="string";if(!e&&t.textures[this.uuid]!==void 0)return t.textures[this.uuid];let n={metadata:{version:4.7,type:"Texture",generator:"Texture.toJSON"},uuid:this.uuid,name:this.name,image:this.source.toJSON(t).uuid,mapping:this.mapping,channel:this.channel,repeat:[this.repeat.x,this.repeat.y],offset:[this.offset.x,this.offset.y],center:[this.center.x,this.center.y],rotation:this.rotation,wrap:[this.wrapS,this.wrapT],format:this.format,internalFormat:this.internalFormat,type:this.type,normalized:this.normalized,colorSpace:this.colorSpace,minFilter:this.minFilter,magFilter:this.magFilter,anisotropy:this.anisotropy,flipY:this.flipY,generateMipmaps:this.generateMipmaps,mipmapsAutoUpdate:this.mipmapsAutoUpdate,premultiplyAlpha:this.premultiplyAlpha,unpackAlignment:this.unpackAlignment};return Object.keys(this.userData).length>0&&(n.userData=this.userData),e||(t.textures[this.uuid]=n),n}dispose(){this.dispatchEvent({type:"dispose"})}transformUv(t){if(this.mapping!==uu)return t;if(t.applyMatrix3(this.matrix),t.x<0||t.x>1)switch(this.wrapS){case fl:t.x=t.x-Math.floor(t.x);break;case ki:t.x=t.x<0?0:1;break;case dl:Math.abs(Math.floor(t.x)%2)===1?t.x=Math.ceil(t.x)-t.x:t.x=t.x-Math.floor(t.x);break}if(t.y<0||t.y>1)switch(this.wrapT){case fl:t.y=t.y-Math.floor(t.y);break;case ki:t.y=t.y<0?0:1;break;case dl:Math.abs(Math.floor(t.y)%2)===1?t.y=Math.ceil(t.y)-t.y:t.y=t.y-Math.floor(t.y);break}return this.flipY&&(t.y=1-t.y),t}set needsUpdate(t){t===!0&&(this.version++,this.source.needsUpdate=!0)}set needsPMREMUpdate(t){t===!0&&this.pmremVersion++}};Wn.DEFAULT_IMAGE=null;Wn.DEFAULT_MAPPING=uu;Wn.DEFAULT_ANISOTROPY=1;var Xe=class{static{this.prototype.isVector4=!0}constructor(t=0,e=0,n=0,s=1){this.x=t,this.y=e,this.z=n,this.w=s}get width(){return this.z}set width(t){this.z=t}get height(){return this.w}set height(t){this.w=t}set(t,e,n,s){return this.x=t,this.y=e,this.z=n,this.w=s,this}setScalar(t){return this.x=t,this.y=t,this.z=t,this.w=t,this}setX(t){return this.x=t,this}setY(t){return this.y=t,this}setZ(t){return this.z=t,this}setW(t){return this.w=t,this}setComponent(t,e){switch(t){case 0:this.x=e;break;case 1:this.y=e;break;case 2:this.z=e;break;case 3:this.w=e;break;default:throw new Error("THREE.Vector4: index is out of range: "+t)}return this}getComponent(t){switch(t){case 0:return this.x;case 1:return this.y;case 2:return this.z;case 3:return this.w;default:throw new Error("THREE.Vector4: index is out of range: "+t)}}clone(){return new this.constructor(this.x,this.y,this.z,this.w)}copy(t){return this.x=t.x,this.y=t.y,this.z=t.z,this.w=t.w!==void 0?t.w:1,this}add(t){return this.x+=t.x,this.y+=t.y,this.z+=t.z,this.w+=t.w,this}addScalar(t){return this.x+=t,this.y+=t,this.z+=t,this.w+=t,this}addVectors(t,e){return this.x=t.x+e.x,this.y=t.y+e.y,this.z=t.z+e.z,this.w=t.w+e.w,this}addScaledVector(t,e){return this.x+=t.x*e,this.y+=t.y*e,this.z+=t.z*e,this.w+=t.w*e,this}sub(t){return this.x-=t.x,this.y-=t.y,this.z-=t.z,this.w-=t.w,this}subScalar(t){return this.x-=t,this.y-=t,this.z-=t,this.w-=t,this}subVectors(t,e){return this.x=t.x-e.x,this.y=t.y-e.y,this.z=t.z-e.z,this.w=t.w-e.w,this}multiply(t){return this.x*=t.x,this.y*=t.y,this.z*=t.z,this.w*=t.w,this}multiplyScalar(t){return this.x*=t,this.y*=t,this.z*=t,this.w*=t,this}applyMatrix4(t){let e=this.x,n=this.y,s=this.z,r=this.w,o=t.elements;return this.x=o[0]*e+o[4]*n+o[8]*s+o[12]*r,this.y=o[1]*e+o[5]*n+o[9]*s+o[13]*r,this.z=o[2]*e+o[6]*n+o[10]*s+o[14]*r,this.w=o[3]*e+o[7]*n+o[11]*s+o[15]*r,this}divide(t){return this.x/=t.x,this.y/=t.y,this.z/=t.z,this.w/=t.w,this}divideScalar(t){return this.multiplyScalar(1/t)}setAxisAngleFromQuaternion(t){this.w=2*Math.acos(t.w);let e=Math.sqrt(1-t.w*t.w);return e<1e-4?(this.x=1,this.y=0,this.z=0):(this.x=t.x/e,this.y=t.y/e,this.z=t.z/e),this}setAxisAngleFromRotationMatrix(t){let e,n,s,r,l=t.elements,c=l[0],f=l[4],u=l[8],h=l[1],p=l[5],x=l[9],w=l[2],m=l[6],d=l[10];if(Math.abs(f-h)<.01&&Math.abs(u-w)<.01&&Math.abs(x-m)<.01){if(Math.abs(f+h)<.1&&Math.abs(u+w)<.1&&Math.abs(x+m)<.1&&Math.abs(c+p+d-3)<.1)return this.set(1,0,0,0),this;e=Math.PI;let C=(c+1)/2,M=(p+1)/2,P=(d+1)/2,T=(f+h)/4,_=(u+w)/4,E=(x+m)/4;return C>M&&C>P?C<.01?(n=0,s=.707106781,r=.707106781):(n=Math.sqrt(C),s=T/n,r=_/n):M>P?M<.01?(n=.707106781,s=0,r=.707106781):(s=Math.sqrt(M),n=T/s,r=E/s):P<.01?(n=.707106781,s=.707106781,r=0):(r=Math.sqrt(P),n=_/r,s=E/r),this.set(n,s,r,e),this}let v=Math.sqrt((m-x)*(m-x)+(u-w)*(u-w)+(h-f)*(h-f));return Math.abs(v)<.001&&(v=1),this.x=(m-x)/v,this.y=(u-w)/v,this.z=(h-f)/v,this.w=Math.acos((c+p+d-1)/2),this}setFromMatrixPosition(t){let e=t.elements;return this.x=e[12],this.y=e[13],this.z=e[14],this.w=e[15],this}min(t){return this.x=Math.min(this.x,t.x),this.y=Math.min(this.y,t.y),this.z=Math.min(this.z,t.z),this.w=Math.min(this.w,t.w),this}max(t){return this.x=Math.max(this.x,t.x),this.y=Math.max(this.y,t.y),this.z=Math.max(this.z,t.z),this.w=Math.max(this.w,t.w),this}clamp(t,e){return this.x=fe(this.x,t.x,e.x),this.y=fe(this.y,t.y,e.y),this.z=fe(this.z,t.z,e.z),this.w=fe(this.w,t.w,e.w),this}clampScalar(t,e){return this.x=fe(this.x,t,e),this.y=fe(this.y,t,e),this.z=fe(this.z,t,e),this.w=fe(this.w,t,e),this}clampLength(t,e){let n=this.length();return this.divideScalar(n||1).multiplyScalar(fe(n,t,e))}floor(){return this.x=Math.floor(this.x),this.y=Math.floor(this.y),this.z=Math.floor(this.z),this.w=Math.floor(this.w),this}ceil(){return this.x=Math.ceil(this.x),this.y=Math.ceil(this.y),this.z=Math.ceil(this.z),this.w=Math.ceil(this.w),this}round(){return this.x=Math.round(this.x),this.y=Math.round(this.y),this.z=Math.round(this.z),this.w=Math.round(this.w),this}roundToZero(){return this.x=Math.trunc(this.x),this.y=Math.trunc(this.y),this.z=Math.trunc(this.z),this.w=Math.trunc(this.w),this}negate(){return this.x=-this.x,this.y=-this.y,this.z=-this.z,this.w=-this.w,this}dot(t){return this.x*t.x+this.y*t.y+this.z*t.z+this.w*t.w}lengthSq(){return this.x*this.x+this.y*this.y+this.z*this.z+this.w*this.w}length(){return Math.sqrt(this.x*this.x+this.y*this.y+this.z*this.z+this.w*this.w)}manhattanLength(){return Math.abs(this.x)+Math.abs(this.y)+Math.abs(this.z)+Math.abs(this.w)}normalize(){return this.divideScalar(this.length()||1)}setLength(t){return this.normalize().multiplyScalar(t)}lerp(t,e){return this.x+=(t.x-this.x)*e,this.y+=(t.y-this.y)*e,this.z+=(t.z-this.z)*e,this.w+=(t.w-this.w)*e,this}lerpVectors(t,e,n){return this.x=t.x+(e.x-t.x)*n,this.y=t.y+(e.y-t.y)*n,this.z=t.z+(e.z-t.z)*n,this.w=t.w+(e.w-t.w)*n,this}equals(t){return t.x===this.x&&t.y===this.y&&t.z===this.z&&t.w===this.w}fromArray(t,e=0){return this.x=t[e],this.y=t[e+1],this.z=t[e+2],this.w=t[e+3],this}toArray(t=[],e=0){return t[e]=this.x,t[e+1]=this.y,t[e+2]=this.z,t[e+3]=this.w,t}fromBufferAttribute(t,e){return this.x=t.getX(e),this.y=t.getY(e),this.z=t.getZ(e),this.w=t.getW(e),this}random(){return this.x=Math.random(),this.y=Math.random(),this.z=Math.random(),this.w=Math.random(),this}*[Symbol.iterator](){yield this.x,yield this.y,yield this.z,yield this.w}},gl=class extends Ti{constructor(t=1,e=1,n={}){super(),n=Object.assign({generateMipmaps:!1,internalFormat:null,minFilter:zn,depthBuffer:!0,stencilBuffer:!1,resolveColorBuffer:!0,resolveDepthBuffer:!0,resolveStencilBuffer:!0,storeMultisampledColorBuffer:!0,storeMultisampledDepthBuffer:!0,storeMultisampledStencilBuffer:!0,depthTexture:null,samples:0,count:1,depth:1,multiview:!1,useArrayDepthTexture:!1},n),this.isRenderTarget=!0,this.width=t,this.height=e,this.depth=n.depth,this.scissor=new Xe(0,0,t,e),this.scissorTest=!1,this.viewport=new Xe(0,0,t,e),this.textures=[];let s=n.count;for(let r=0;r<s;r++)this.textures[r]=new Wn({width:t,height:e,depth:n.depth}),this.textures[r].isRenderTargetTexture=!0,this.textures[r].renderTarget=this;this._setTextureOptions(n),this.depthBuffer=n.depthBuffer,this.stencilBuffer=n.stencilBuffer,this.resolveColorBuffer=n.resolveColorBuffer,this.resolveDepthBuffer=n.resolveDepthBuffer,this.resolveStencilBuffer=n.resolveStencilBuffer,this.storeMultisampledColorBuffer=n.storeMultisampledColorBuffer,this.storeMultisampledDepthBuffer=n.storeMultisampledDepthBuffer,this.storeMultisampledStencilBuffer=n.storeMultisampledStencilBuffer,this._depthTexture=null,this.depthTexture=n.depthTexture,this.samples=n.samples,this.multiview=n.multiview,this.useArrayDepthTexture=n.useArrayDepthTexture}_setTextureOptions(t={}){let e={minFilter:zn,generateMipmaps:!1,flipY:!1,internalFormat:null};t.mapping!==void 0&&(e.mapping=t.mapping),t.wrapS!==void 0&&(e.wrapS=t.wrapS),t.wrapT!==void 0&&(e.wrapT=t.wrapT),t.wrapR!==void 0&&(e.wrapR=t.wrapR),t.magFilter!==void 0&&(e.magFilter=t.magFilter),t.minFilter!==void 0&&(e.minFilter=t.minFilter),t.format!==void 0&&(e.format=t.format),t.type!==void 0&&(e.type=t.type),t.anisotropy!==void 0&&(e.anisotropy=t.anisotropy),t.colorSpace!==void 0&&(e.colorSpace=t.colorSpace),t.flipY!==void 0&&(e.flipY=t.flipY),t.generateMipmaps!==void 0&&(e.generateMipmaps=t.generateMipmaps),t.mipmapsAutoUpdate!==void 0&&(e.mipmapsAutoUpdate=t.mipmapsAutoUpdate),t.internalFormat!==void 0&&(e.internalFormat=t.internalFormat);for(let n=0;n<this.textures.length;n++)this.textures[n].setValues(e)}get texture(){return this.textures[0]}set texture(t){this.textures[0]=t}set depthTexture(t){this._depthTexture!==null&&this._depthTexture.renderTarget===this&&(this._depthTexture.renderTarget=null),t!==null&&t.renderTarget===null&&(t.renderTarget=this),this._depthTexture=t}get depthTexture(){return this._depthTexture}setSize(t,e,n=1){if(this.width!==t||this.height!==e||this.depth!==n){this.width=t,this.height=e,this.depth=n;for(let s=0,r=this.textures.length;s<r;s++)this.textures[s].image.width=t,this.textures[s].image.height=e,this.textures[s].image.depth=n,this.textures[s].isData3DTexture!==!0&&(this.textures[s].isArrayTexture=this.textures[s].image.depth>1);this.dispose()}this.viewport.set(0,0,t,e),this.scissor.set(0,0,t,e)}clone(){return new this.constructor().copy(this)}copy(t){this.width=t.width,this.height=t.height,this.depth=t.depth,this.scissor.copy(t.scissor),this.scissorTest=t.scissorTest,this.viewport.copy(t.viewport),this.textures.length=0;for(let e=0,n=t.textures.length;e<n;e++){this.textures[e]=t.textures[e].clone(),this.textures[e].isRenderTargetTexture=!0,this.textures[e].renderTarget=this;let s=Object.assign({},t.textures[e].image);this.textures[e].source=new Wr(s)}if(this.depthBuffer=t.depthBuffer,this.stencilBuffer=t.stencilBuffer,this.resolveColorBuffer=t.resolveColorBuffer,this.resolveDepthBuffer=t.resolveDepthBuffer,this.resolveStencilBuffer=t.resolveStencilBuffer,this.storeMultisampledColorBuffer=t.storeMultisampledColorBuffer,this.storeMultisampledDepthBuffer=t.storeMultisampledDepthBuffer,this.storeMultisampledStencilBuffer=t.storeMultisampledStencilBuffer,t.depthTexture!==null)if(t.depthTexture.renderTarget===t){let e=t.depthTexture.clone();e.renderTarget=null,this.depthTexture=e}else this.depthTexture=t.depthTexture;else this.depthTexture=null;return this.samples=t.samples,this.multiview=t.multiview,this.useArrayDepthTexture=t.useArrayDepthTexture,this}dispose(){this.dispatchEvent({type:"dispose"})}},Vn=class extends gl{constructor(t=1,e=1,n={}){super(t,e,n),this.isWebGLRenderTarget=!0}},Bo=class extends Wn{constructor(t=null,e=1,n=1,s=1){super(null),this.isDataArrayTexture=!0,this.image={data:t,width:e,height:n,depth:s},this.magFilter=wn,this.minFilter=wn,this.wrapR=ki,this.generateMipmaps=!1,this.flipY=!1,this.unpackAlignment=1,this.layerUpdates=new Set}copy(t){return super.copy(t),this.wrapR=t.wrapR,this}addLayerUpdate(t){this.layerUpdates.add(t)}clearLayerUpdates(){this.layerUpdates.clear()}};var _l=class extends Wn{constructor(t=null,e=1,n=1,s=1){super(null),this.isData3DTexture=!0,this.image={data:t,width:e,height:n,depth:s},this.magFilter=wn,this.minFilter=wn,this.wrapR=ki,this.generateMipmaps=!1,this.flipY=!1,this.unpackAlignment=1}copy(t){return super.copy(t),this.wrapR=t.wrapR,this}};var Se=class i{static{this.prototype.isMatrix4=!0}constructor(t,e,n,s,r,o,a,l,c,f,u,h,p,x,w,m){this.elements=[1,0,0,0,0,1,0,0,0,0,1,0,0,0,0,1],t!==void 0&&this.set(t,e,n,s,r,o,a,l,c,f,u,h,p,x,w,m)}set(t,e,n,s,r,o,a,l,c,f,u,h,p,x,w,m){let d=this.elements;return d[0]=t,d[4]=e,d[8]=n,d[12]=s,d[1]=r,d[5]=o,d[9]=a,d[13]=l,d[2]=c,d[6]=f,d[10]=u,d[14]=h,d[3]=p,d[7]=x,d[11]=w,d[15]=m,this}identity(){return this.set(1,0,0,0,0,1,0,0,0,0,1,0,0,0,0,1),this}clone(){return new i().fromArray(this.elements)}copy(t){let e=this.elements,n=t.elements;return e[0]=n[0],e[1]=n[1],e[2]=n[2],e[3]=n[3],e[4]=n[4],e[5]=n[5],e[6]=n[6],e[7]=n[7],e[8]=n[8],e[9]=n[9],e[10]=n[10],e[11]=n[11],e[12]=n[12],e[13]=n[13],e[14]=n[14],e[15]=n[15],this}copyPosition(t){let e=this.elements,n=t.elements;return e[12]=n[12],e[13]=n[13],e[14]=n[14],this}setFromMatrix3(t){let e=t.elements;return this.set(e[0],e[3],e[6],0,e[1],e[4],e[7],0,e[2],e[5],e[8],0,0,0,0,1),this}extractBasis(t,e,n){return this.determinantAffine()===0?(t.set(1,0,0),e.set(0,1,0),n.set(0,0,1),this):(t.setFromMatrixColumn(this,0),e.setFromMatrixColumn(this,1),n.setFromMatrixColumn(this,2),this)}makeBasis(t,e,n){return this.set(t.x,e.x,n.x,0,t.y,e.y,n.y,0,t.z,e.z,n.z,0,0,0,0,1),this}extractRotation(t){if(t.determinantAffine()===0)return this.identity();let e=this.elements,n=t.elements,s=1/Tr.setFromMatrixColumn(t,0).length(),r=1/Tr.setFromMatrixColumn(t,1).length(),o=1/Tr.setFromMatrixColumn(t,2).length();return e[0]=n[0]*s,e[1]=n[1]*s,e[2]=n[2]*s,e[3]=0,e[4]=n[4]*r,e[5]=n[5]*r,e[6]=n[6]*r,e[7]=0,e[8]=n[8]*o,e[9]=n[9]*o,e[10]=n[10]*o,e[11]=0,e[12]=0,e[13]=0,e[14]=0,e[15]=1,this}makeRotationFromEuler(t){let e=this.elements,n=t.x,s=t.y,r=t.z,o=Math.cos(n),a=Math.sin(n),l=Math.cos(s),c=Math.sin(s),f=Math.cos(r),u=Math.sin(r);if(t.order==="XYZ"){let h=o*f,p=o*u,x=a*f,w=a*u;e[0]=l*f,e[4]=-l*u,e[8]=c,e[1]=p+x*c,e[5]=h-w*c,e[9]=-a*l,e[2]=w-h*c,e[6]=x+p*c,e[10]=o*l}else if(t.order==="YXZ"){let h=l*f,p=l*u,x=c*f,w=c*u;e[0]=h+w*a,e[4]=x*a-p,e[8]=o*c,e[1]=o*u,e[5]=o*f,e[9]=-a,e[2]=p*a-x,e[6]=w+h*a,e[10]=o*l}else if(t.order==="ZXY"){let h=l*f,p=l*u,x=c*f,w=c*u;e[0]=h-w*a,e[4]=-o*u,e[8]=x+p*a,e[1]=p+x*a,e[5]=o*f,e[9]=w-h*a,e[2]=-o*c,e[6]=a,e[10]=o*l}else if(t.order==="ZYX"){let h=o*f,p=o*u,x=a*f,w=a*u;e[0]=l*f,e[4]=x*c-p,e[8]=h*c+w,e[1]=l*u,e[5]=w*c+h,e[9]=p*c-x,e[2]=-c,e[6]=a*l,e[10]=o*l}else if(t.order==="YZX"){let h=o*l,p=o*c,x=a*l,w=a*c;e[0]=l*f,e[4]=w-h*u,e[8]=x*u+p,e[1]=u,e[5]=o*f,e[9]=-a*f,e[2]=-c*f,e[6]=p*u+x,e[10]=h-w*u}else if(t.order==="XZY"){let h=o*l,p=o*c,x=a*l,w=a*c;e[0]=l*f,e[4]=-u,e[8]=c*f,e[1]=h*u+w,e[5]=o*f,e[9]=p*u-x,e[2]=x*u-p,e[6]=a*f,e[10]=w*u+h}return e[3]=0,e[7]=0,e[11]=0,e[12]=0,e[13]=0,e[14]=0,e[15]=1,this}makeRotationFromQuaternion(t){return this.compose(P_,t,I_)}lookAt(t,e,n){let s=this.elements;return ei.subVectors(t,e),ei.lengthSq()===0&&(ei.z=1),ei.normalize(),_s.crossVectors(n,ei),_s.lengthSq()===0&&(Math.abs(n.z)===1?ei.x+=1e-4:ei.z+=1e-4,ei.normalize(),_s.crossVectors(n,ei)),_s.normalize(),Fa.crossVectors(ei,_s),s[0]=_s.x,s[4]=Fa.x,s[8]=ei.x,s[1]=_s.y,s[5]=Fa.y,s[9]=ei.y,s[2]=_s.z,s[6]=Fa.z,s[10]=ei.z,this}multiply(t){return this.multiplyMatrices(this,t)}premultiply(t){return this.multiplyMatrices(t,this)}multiplyMatrices(t,e){let n=t.elements,s=e.elements,r=this.elements,o=n[0],a=n[4],l=n[8],c=n[12],f=n[1],u=n[5],h=n[9],p=n[13],x=n[2],w=n[6],m=n[10],d=n[14],v=n[3],C=n[7],M=n[11],P=n[15],T=s[0],_=s[4],E=s[8],B=s[12],N=s[1],D=s[5],k=s[9],G=s[13],L=s[2],H=s[6],Y=s[10],V=s[14],lt=s[3],J=s[7],j=s[11],it=s[15];return r[0]=o*T+a*N+l*L+c*lt,r[4]=o*_+a*D+l*H+c*J,r[8]=o*E+a*k+l*Y+c*j,r[12]=o*B+a*G+l*V+c*it,r[1]=f*T+u*N+h*L+p*lt,r[5]=f*_+u*D+h*H+p*J,r[9]=f*E+u*k+h*Y+p*j,r[13]=f*B+u*G+h*V+p*it,r[2]=x*T+w*N+m*L+d*lt,r[6]=x*_+w*D+m*H+d*J,r[10]=x*E+w*k+m*Y+d*j,r[14]=x*B+w*G+m*V+d*it,r[3]=v*T+C*N+M*L+P*lt,r[7]=v*_+C*D+M*H+P*J,r[11]=v*E+C*k+M*Y+P*j,r[15]=v*B+C*G+M*V+P*it,this}multiplyScalar(t){let e=this.elements;return e[0]*=t,e[4]*=t,e[8]*=t,e[12]*=t,e[1]*=t,e[5]*=t,e[9]*=t,e[13]*=t,e[2]*=t,e[6]*=t,e[10]*=t,e[14]*=t,e[3]*=t,e[7]*=t,e[11]*=t,e[15]*=t,this}determinant(){let t=this.elements,e=t[0],n=t[4],s=t[8],r=t[12],o=t[1],a=t[5],l=t[9],c=t[13],f=t[2],u=t[6],h=t[10],p=t[14],x=t[3],w=t[7],m=t[11],d=t[15],v=l*p-c*h,C=a*p-c*u,M=a*h-l*u,P=o*p-c*f,T=o*h-l*f,_=o*u-a*f;return e*(w*v-m*C+d*M)-n*(x*v-m*P+d*T)+s*(x*C-w*P+d*_)-r*(x*M-w*T+m*_)}determinantAffine(){let t=this.elements,e=t[0],n=t[4],s=t[8],r=t[1],o=t[5],a=t[9],l=t[2],c=t[6],f=t[10];return e*(o*f-a*c)-n*(r*f-a*l)+s*(r*c-o*l)}transpose(){let t=this.elements,e;return e=t[1],t[1]=t[4],t[4]=e,e=t[2],t[2]=t[8],t[8]=e,e=t[6],t[6]=t[9],t[9]=e,e=t[3],t[3]=t[12],t[12]=e,e=t[7],t[7]=t[13],t[13]=e,e=t[11],t[11]=t[14],t[14]=e,this}setPosition(t,e,n){let s=this.elements;return t.isVector3?(s[12]=t.x,s[13]=t.y,s[14]=t.z):(s[12]=t,s[13]=e,s[14]=n),this}invert(){let t=this.elements,e=t[0],n=t[1],s=t[2],r=t[3],o=t[4],a=t[5],l=t[6],c=t[7],f=t[8],u=t[9],h=t[10],p=t[11],x=t[12],w=t[13],m=t[14],d=t[15],v=e*a-n*o,C=e*l-s*o,M=e*c-r*o,P=n*l-s*a,T=n*c-r*a,_=s*c-r*l,E=f*w-u*x,B=f*m-h*x,N=f*d-p*x,D=u*m-h*w,k=u*d-p*w,G=h*d-p*m,L=v*G-C*k+M*D+P*N-T*B+_*E;if(L===0)return this.set(0,0,0,0,0,0,0,0,0,0,0,0,0,0,0,0);let H=1/L;return t[0]=(a*G-l*k+c*D)*H,t[1]=(s*k-n*G-r*D)*H,t[2]=(w*_-m*T+d*P)*H,t[3]=(h*T-u*_-p*P)*H,t[4]=(l*N-o*G-c*B)*H,t[5]=(e*G-s*N+r*B)*H,t[6]=(m*M-x*_-d*C)*H,t[7]=(f*_-h*M+p*C)*H,t[8]=(o*k-a*N+c*E)*H,t[9]=(n*N-e*k-r*E)*H,t[10]=(x*T-w*M+d*v)*H,t[11]=(u*M-f*T-p*v)*H,t[12]=(a*B-o*D-l*E)*H,t[13]=(e*D-n*B+s*E)*H,t[14]=(w*C-x*P-m*v)*H,t[15]=(f*P-u*C+h*v)*H,this}scale(t){let e=this.elements,n=t.x,s=t.y,r=t.z;return e[0]*=n,e[4]*=s,e[8]*=r,e[1]*=n,e[5]*=s,e[9]*=r,e[2]*=n,e[6]*=s,e[10]*=r,e[3]*=n,e[7]*=s,e[11]*=r,this}getMaxScaleOnAxis(){let t=this.elements,e=t[0]*t[0]+t[1]*t[1]+t[2]*t[2],n=t[4]*t[4]+t[5]*t[5]+t[6]*t[6],s=t[8]*t[8]+t[9]*t[9]+t[10]*t[10];return Math.sqrt(Math.max(e,n,s))}makeTranslation(t,e,n){return t.isVector3?this.set(1,0,0,t.x,0,1,0,t.y,0,0,1,t.z,0,0,0,1):this.set(1,0,0,t,0,1,0,e,0,0,1,n,0,0,0,1),this}makeRotationX(t){let e=Math.cos(t),n=Math.sin(t);return this.set(1,0,0,0,0,e,-n,0,0,n,e,0,0,0,0,1),this}makeRotationY(t){let e=Math.cos(t),n=Math.sin(t);return this.set(e,0,n,0,0,1,0,0,-n,0,e,0,0,0,0,1),this}makeRotationZ(t){let e=Math.cos(t),n=Math.sin(t);return this.set(e,-n,0,0,n,e,0,0,0,0,1,0,0,0,0,1),this}makeRotationAxis(t,e){let n=Math.cos(e),s=Math.sin(e),r=1-n,o=t.x,a=t.y,l=t.z,c=r*o,f=r*a;return this.set(c*o+n,c*a-s*l,c*l+s*a,0,c*a+s*l,f*a+n,f*l-s*o,0,c*l-s*a,f*l+s*o,r*l*l+n,0,0,0,0,1),this}makeScale(t,e,n){return this.set(t,0,0,0,0,e,0,0,0,0,n,0,0,0,0,1),this}makeShear(t,e,n,s,r,o){return this.set(1,n,r,0,t,1,o,0,e,s,1,0,0,0,0,1),this}compose(t,e,n){let s=this.elements,r=e._x,o=e._y,a=e._z,l=e._w,c=r+r,f=o+o,u=a+a,h=r*c,p=r*f,x=r*u,w=o*f,m=o*u,d=a*u,v=l*c,C=l*f,M=l*u,P=n.x,T=n.y,_=n.z;return s[0]=(1-(w+d))*P,s[1]=(p+M)*P,s[2]=(x-C)*P,s[3]=0,s[4]=(p-M)*T,s[5]=(1-(h+d))*T,s[6]=(m+v)*T,s[7]=0,s[8]=(x+C)*_,s[9]=(m-v)*_,s[10]=(1-(h+w))*_,s[11]=0,s[12]=t.x,s[13]=t.y,s[14]=t.z,s[15]=1,this}decompose(t,e,n){let s=this.elements;t.x=s[12],t.y=s[13],t.z=s[14];let r=this.determinantAffine();if(r===0)return n.set(1,1,1),e.identity(),this;let o=Tr.set(s[0],s[1],s[2]).length(),a=Tr.set(s[4],s[5],s[6]).length(),l=Tr.set(s[8],s[9],s[10]).length();r<0&&(o=-o),bi.copy(this);let c=1/o,f=1/a,u=1/l;return bi.elements[0]*=c,bi.elements[1]*=c,bi.elements[2]*=c,bi.elements[4]*=f,bi.elements[5]*=f,bi.elements[6]*=f,bi.elements[8]*=u,bi.elements[9]*=u,bi.elements[10]*=u,e.setFromRotationMatrix(bi),n.x=o,n.y=a,n.z=l,this}makePerspective(t,e,n,s,r,o,a=ui,l=!1){let c=this.elements,f=2*r/(e-t),u=2*r/(n-s),h=(e+t)/(e-t),p=(n+s)/(n-s),x,w;if(l)x=r/(o-r),w=o*r/(o-r);else if(a===ui)x=-(o+r)/(o-r),w=-2*o*r/(o-r);else if(a===Vr)x=-o/(o-r),w=-o*r/(o-r);else throw new Error("THREE.Matrix4.makePerspective(): Invalid coordinate system: "+a);return c[0]=f,c[4]=0,c[8]=h,c[12]=0,c[1]=0,c[5]=u,c[9]=p,c[13]=0,c[2]=0,c[6]=0,c[10]=x,c[14]=w,c[3]=0,c[7]=0,c[11]=-1,c[15]=0,this}makeOrthographic(t,e,n,s,r,o,a=ui,l=!1){let c=this.elements,f=2/(e-t),u=2/(n-s),h=-(e+t)/(e-t),p=-(n+s)/(n-s),x,w;if(l)x=1/(o-r),w=o/(o-r);else if(a===ui)x=-2/(o-r),w=-(o+r)/(o-r);else if(a===Vr)x=-1/(o-r),w=-r/(o-r);else throw new Error("THREE.Matrix4.makeOrthographic(): Invalid coordinate system: "+a);return c[0]=f,c[4]=0,c[8]=0,c[12]=h,c[1]=0,c[5]=u,c[9]=0,c[13]=p,c[2]=0,c[6]=0,c[10]=x,c[14]=w,c[3]=0,c[7]=0,c[11]=0,c[15]=1,this}equals(t){let e=this.elements,n=t.elements;for(let s=0;s<16;s++)if(e[s]!==n[s])return!1;return!0}fromArray(t,e=0){for(let n=0;n<16;n++)this.elements[n]=t[n+e];return this}toArray(t=[],e=0){let n=this.elements;return t[e]=n[0],t[e+1]=n[1],t[e+2]=n[2],t[e+3]=n[3],t[e+4]=n[4],t[e+5]=n[5],t[e+6]=n[6],t[e+7]=n[7],t[e+8]=n[8],t[e+9]=n[9],t[e+10]=n[10],t[e+11]=n[11],t[e+12]=n[12],t[e+13]=n[13],t[e+14]=n[14],t[e+15]=n[15],t}},Tr=new W,bi=new Se,P_=new W(0,0,0),I_=new W(1,1,1),_s=new W,Fa=new W,ei=new W,qd=new Se,Yd=new Cn,is=class i{constructor(t=0,e=0,n=0,s=i.DEFAULT_ORDER){this.isEuler=!0,this._x=t,this._y=e,this._z=n,this._order=s}get x(){return this._x}set x(t){this._x=t,this._onChangeCallback()}get y(){return this._y}set y(t){this._y=t,this._onChangeCallback()}get z(){return this._z}set z(t){this._z=t,this._onChangeCallback()}get order(){return this._order}set order(t){this._order=t,this._onChangeCallback()}set(t,e,n,s=this._order){return this._x=t,this._y=e,this._z=n,this._order=s,this._onChangeCallback(),this}clone(){return new this.constructor(this._x,this._y,this._z,this._order)}copy(t){return this._x=t._x,this._y=t._y,this._z=t._z,this._order=t._order,this._onChangeCallback(),this}setFromRotationMatrix(t,e=this._order,n=!0){let s=t.elements,r=s[0],o=s[4],a=s[8],l=s[1],c=s[5],f=s[9],u=s[2],h=s[6],p=s[10];switch(e){case"XYZ":this._y=Math.asin(fe(a,-1,1)),Math.abs(a)<.9999999?(this._x=Math.atan2(-f,p),this._z=Math.atan2(-o,r)):(this._x=Math.atan2(h,c),this._z=0);break;case"YXZ":this._x=Math.asin(-fe(f,-1,1)),Math.abs(f)<.9999999?(this._y=Math.atan2(a,p),this._z=Math.atan2(l,c)):(this._y=Math.atan2(-u,r),this._z=0);break;case"ZXY":this._x=Math.asin(fe(h,-1,1)),Math.abs(h)<.9999999?(this._y=Math.atan2(-u,p),this._z=Math.atan2(-o,c)):(this._y=0,this._z=Math.atan2(l,r));break;case"ZYX":this._y=Math.asin(-fe(u,-1,1)),Math.abs(u)<.9999999?(this._x=Math.atan2(h,p),this._z=Math.atan2(l,r)):(this._x=0,this._z=Math.atan2(-o,c));break;case"YZX":this._z=Math.asin(fe(l,-1,1)),Math.abs(l)<.9999999?(this._x=Math.atan2(-f,c),this._y=Math.atan2(-u,r)):(this._x=0,this._y=Math.atan2(a,p));break;case"XZY":this._z=Math.asin(-fe(o,-1,1)),Math.abs(o)<.9999999?(this._x=Math.atan2(h,c),this._y=Math.atan2(a,r)):(this._x=Math.atan2(-f,p),this._y=0);break;default:qt("Euler: .setFromRotationMatrix() encountered an unknown order: "+e)}return this._order=e,n===!0&&this._onChangeCallback(),this}setFromQuaternion(t,e,n){return qd.makeRotationFromQuaternion(t),this.setFromRotationMatrix(qd,e,n)}setFromVector3(t,e=this._order){return this.set(t.x,t.y,t.z,e)}reorder(t){return Yd.setFromEuler(this),this.setFromQuaternion(Yd,t)}equals(t){return t._x===this._x&&t._y===this._y&&t._z===this._z&&t._order===this._order}fromArray(t){return this._x=t[0],this._y=t[1],this._z=t[2],t[3]!==void 0&&(this._order=t[3]),this._onChangeCallback(),this}toArray(t=[],e=0){return t[e]=this._x,t[e+1]=this._y,t[e+2]=this._z,t[e+3]=this._order,t}_onChange(t){return this._onChangeCallback=t,this}_onChangeCallback(){}*[Symbol.iterator](){yield this._x,yield this._y,yield this._z,yield this._order}};is.DEFAULT_ORDER="XYZ";var ko=class{constructor(){this.mask=1}set(t){this.mask=(1<<t|0)>>>0}enable(t){this.mask|=1<<t|0}enableAll(){this.mask=-1}toggle(t){this.mask^=1<<t|0}disable(t){this.mask&=~(1<<t|0)}disableAll(){this.mask=0}test(t){return(this.mask&t.mask)!==0}isEnabled(t){return(this.mask&(1<<t|0))!==0}},L_=0,Zd=new W,Ar=new Cn,Ji=new Se,Oa=new W,Eo=new W,D_=new W,N_=new Cn,$d=new W(1,0,0),Jd=new W(0,1,0),Kd=new W(0,0,1),jd={type:"added"},U_={type:"removed"},Rr={type:"childadded",child:null},Ch={type:"childremoved",child:null},Pn=class i extends Ti{constructor(){super(),this.isObject3D=!0,Object.defineProperty(this,"id",{value:L_++}),this.uuid=io(),this.name="",this.type="Object3D",this.parent=null,this.children=[],this.up=i.DEFAULT_UP.clone();let t=new W,e=new is,n=new Cn,s=new W(1,1,1);function r(){n.setFromEuler(e,!1)}function o(){e.setFromQuaternion(n,void 0,!1)}e._onChange(r),n._onChange(o),Object.defineProperties(this,{position:{configurable:!0,enumerable:!0,value:t},rotation:{configurable:!0,enumerable:!0,value:e},quaternion:{configurable:!0,enumerable:!0,value:n},scale:{configurable:!0,enumerable:!0,value:s},modelViewMatrix:{value:new Se},normalMatrix:{value:new Qt}}),this.matrix=new Se,this.matrixWorld=new Se,this.matrixAutoUpdate=i.DEFAULT_MATRIX_AUTO_UPDATE,this.matrixWorldAutoUpdate=i.DEFAULT_MATRIX_WORLD_AUTO_UPDATE,this.matrixWorldNeedsUpdate=!1,this.layers=new ko,this.visible=!0,this.castShadow=!1,this.receiveShadow=!1,this.frustumCulled=!0,this.renderOrder=0,this.animations=[],this.customDepthMaterial=void 0,this.customDistanceMaterial=void 0,this.static=!1,this.userData={},this.pivot=null}onBeforeShadow(){}onAfterShadow(){}onBeforeRender(){}onAfterRender(){}applyMatrix4(t){this.matrixAutoUpdate&&this.updateMatrix(),this.matrix.premultiply(t),this.matrix.decompose(this.position,this.quaternion,this.scale),this.pivot!==null&&this.position.copy(this.pivot).applyMatrix4(this.matrix).sub(this.pivot)}applyQuaternion(t){return this.quaternion.premultiply(t),this}setRotationFromAxisAngle(t,e){this.quaternion.setFromAxisAngle(t,e)}setRotationFromEuler(t){this.quaternion.setFromEuler(t,!0)}setRotationFromMatrix(t){this.quaternion.setFromRotationMatrix(t)}setRotationFromQuaternion(t){this.quaternion.copy(t)}rotateOnAxis(t,e){return Ar.setFromAxisAngle(t,e),this.quaternion.multiply(Ar),this}rotateOnWorldAxis(t,e){return Ar.setFromAxisAngle(t,e),this.quaternion.premultiply(Ar),this}rotateX(t){return this.rotateOnAxis($d,t)}rotateY(t){return this.rotateOnAxis(Jd,t)}rotateZ(t){return this.rotateOnAxis(Kd,t)}translateOnAxis(t,e){return Zd.copy(t).applyQuaternion(this.quaternion),this.position.add(Zd.multiplyScalar(e)),this}translateX(t){return this.translateOnAxis($d,t)}translateY(t){return this.translateOnAxis(Jd,t)}translateZ(t){return this.translateOnAxis(Kd,t)}localToWorld(t){return this.updateWorldMatrix(!0,!1),t.applyMatrix4(this.matrixWorld)}worldToLocal(t){return this.updateWorldMatrix(!0,!1),t.applyMatrix4(Ji.copy(this.matrixWorld).invert())}lookAt(t,e,n){t.isVector3?Oa.copy(t):Oa.set(t,e,n);let s=this.parent;this.updateWorldMatrix(!0,!1),Eo.setFromMatrixPosition(this.matrixWorld),this.isCamera||this.isLight?Ji.lookAt(Eo,Oa,this.up):Ji.lookAt(Oa,Eo,this.up),this.quaternion.setFromRotationMatrix(Ji),s&&(Ji.extractRotation(s.matrixWorld),Ar.setFromRotationMatrix(Ji),this.quaternion.premultiply(Ar.invert()))}add(t){if(arguments.length>1){for(let e=0;e<arguments.length;e++)this.add(arguments[e]);return this}return t===this?(jt("Object3D.add: object can't be added as a child of itself.",t),this):(t&&t.isObject3D?(t.removeFromParent(),t.parent=this,this.children.push(t),t.dispatchEvent(jd),Rr.child=t,this.dispatchEvent(Rr),Rr.child=null):jt("Object3D.add: object not an instance of THREE.Object3D.",t),this)}remove(t){if(arguments.length>1){for(let n=0;n<arguments.length;n++)this.remove(arguments[n]);return this}let e=this.children.indexOf(t);return e!==-1&&(t.parent=null,this.children.splice(e,1),t.dispatchEvent(U_),Ch.child=t,this.dispatchEvent(Ch),Ch.child=null),this}removeFromParent(){let t=this.parent;return t!==null&&t.remove(this),this}clear(){return this.remove(...this.children)}attach(t){return this.updateWorldMatrix(!0,!1),Ji.copy(this.matrixWorld).invert(),t.parent!==null&&(t.parent.updateWorldMatrix(!0,!1),Ji.multiply(t.parent.matrixWorld)),t.applyMatrix4(Ji),t.removeFromParent(),t.parent=this,this.children.push(t),t.updateWorldMatrix(!1,!0),t.dispatchEvent(jd),Rr.child=t,this.dispatchEvent(Rr),Rr.child=null,this}getObjectById(t){return this.getObjectByProperty("id",t)}getObjectByName(t){return this.getObjectByProperty("name",t)}getObjectByProperty(t,e){if(this[t]===e)return this;for(let n=0,s=this.children.length;n<s;n++){let o=this.children[n].getObjectByProperty(t,e);if(o!==void 0)return o}}getObjectsByProperty(t,e,n=[]){this[t]===e&&n.push(this);let s=this.children;for(let r=0,o=s.length;r<o;r++)s[r].getObjectsByProperty(t,e,n);return n}getWorldPosition(t){return this.updateWorldMatrix(!0,!1),t.setFromMatrixPosition(this.matrixWorld)}getWorldQuaternion(t){return this.updateWorldMatrix(!0,!1),this.matrixWorld.decompose(Eo,t,D_),t}getWorldScale(t){return this.updateWorldMatrix(!0,!1),this.matrixWorld.decompose(Eo,N_,t),t}getWorldDirection(t){this.updateWorldMatrix(!0,!1);let e=this.matrixWorld.elements;return t.set(e[8],e[9],e[10]).normalize()}raycast(){}intersectsFrustum(){return!0}traverse(t){t(this);let e=this.children;for(let n=0,s=e.length;n<s;n++)e[n].traverse(t)}traverseVisible(t){if(this.visible===!1)return;t(this);let e=this.children;for(let n=0,s=e.length;n<s;n++)e[n].traverseVisible(t)}traverseAncestors(t){let e=this.parent;e!==null&&(t(e),e.traverseAncestors(t))}updateMatrix(){this.matrix.compose(this.position,this.quaternion,this.scale);let t=this.pivot;if(t!==null){let e=t.x,n=t.y,s=t.z,r=this.matrix.elements;r[12]+=e-r[0]*e-r[4]*n-r[8]*s,r[13]+=n-r[1]*e-r[5]*n-r[9]*s,r[14]+=s-r[2]*e-r[6]*n-r[10]*s}this.matrixWorldNeedsUpdate=!0}updateMatrixWorld(t){this.matrixAutoUpdate&&this.updateMatrix(),(this.matrixWorldNeedsUpdate||t)&&(this.matrixWorldAutoUpdate===!0&&(this.parent===null?this.matrixWorld.copy(this.matrix):this.matrixWorld.multiplyMatrices(this.parent.matrixWorld,this.matrix)),this.matrixWorldNeedsUpdate=!1,t=!0);let e=this.children;for(let n=0,s=e.length;n<s;n++)e[n].updateMatrixWorld(t)}updateWorldMatrix(t,e,n=!1){let s=this.parent;if(t===!0&&s!==null&&s.updateWorldMatrix(!0,!1),this.matrixAutoUpdate&&this.updateMatrix(),(this.matrixWorldNeedsUpdate||n)&&(this.matrixWorldAutoUpdate===!0&&(this.parent===null?this.matrixWorld.copy(this.matrix):this.matrixWorld.multiplyMatrices(this.parent.matrixWorld,this.matrix)),this.matrixWorldNeedsUpdate=!1,n=!0),e===!0){let r=this.children;for(let o=0,a=r.length;o<a;o++)r[o].updateWorldMatrix(!1,!0,n)}}toJSON(t){let e=t===void 0||typeof t=="string",n={};e&&(t={geometries:{},materials:{},textures:{},images:{},shapes:{},skeletons:{},animations:{},nodes:{}},n.metadata={version:4.7,type:"Object",generator:"Object3D.toJSON"});let s={};s.uuid=this.uuid,s.type=this.type,s.name=this.name,s.castShadow=this.castShadow,s.receiveShadow=this.receiveShadow,s.visible=this.visible,s.frustumCulled=this.frustumCulled,s.renderOrder=this.renderOrder,s.static=this.static,s.matrixAutoUpdate=this.matrixAutoUpdate,Object.keys(this.userData).length>0&&(s.userData=this.userData),s.layers=this.layers.mask,s.matrix=this.matrix.toArray(),s.up=this.up.toArray(),this.pivot!==null&&(s.pivot=this.pivot.toArray()),this.morphTargetDictionary!==void 0&&(s.morphTargetDictionary=Object.assign({},this.morphTargetDictionary)),this.morphTargetInfluences!==void 0&&(s.morphTargetInfluences=this.morphTargetInfluences.slice()),this.isInstancedMesh&&(s.type="InstancedMesh",s.count=this.count,s.instanceMatrix=this.instanceMatrix.toJSON(),this.instanceColor!==null&&(s.instanceColor=this.instanceColor.toJSON())),this.isBatchedMesh&&(s.type="BatchedMesh",s.perObjectFrustumCulled=this.perObjectFrustumCulled,s.sortObjects=this.sortObjects,s.drawRanges=this._drawRanges,s.reservedRanges=this._reservedRanges,s.geometryInfo=this._geometryInfo.map(a=>({...a,boundingBox:a.boundingBox?a.boundingBox.toJSON():void 0,boundingSphere:a.boundingSphere?a.boundingSphere.toJSON():void 0})),s.instanceInfo=this._instanceInfo.map(a=>({...a})),s.availableInstanceIds=this._availableInstanceIds.slice(),s.availableGeometryIds=this._availableGeometryIds.slice(),s.nextIndexStart=this._nextIndexStart,s.nextVertexStart=this._nextVertexStart,s.geometryCount=this._geometryCount,s.maxInstanceCount=this._maxInstanceCount,s.maxVertexCount=this._maxVertexCount,s.maxIndexCount=this._maxIndexCount,s.geometryInitialized=this._geometryInitialized,s.matricesTexture=this._matricesTexture.toJSON(t),s.indirectTexture=this._indirectTexture.toJSON(t),this._colorsTexture!==null&&(s.colorsTexture=this._colorsTexture.toJSON(t)),this.boundingSphere!==null&&(s.boundingSphere=this.boundingSphere.toJSON()),this.boundingBox!==null&&(s.boundingBox=this.boundingBox.toJSON()));function r(a,l){return a[l.uuid]===void 0&&(a[l.uuid]=l.toJSON(t)),l.uuid}if(this.isScene)this.background&&(this.background.isColor?s.background=this.background.toJSON():this.background.isTexture&&(s.background=this.background.toJSON(t).uuid)),this.environment&&this.environment.isTexture&&this.environment.isRenderTargetTexture!==!0&&(s.environment=this.environment.toJSON(t).uuid);else if(this.isMesh||this.isLine||this.isPoints){s.geometry=r(t.geometries,this.geometry);let a=this.geometry.parameters;if(a!==void 0&&a.shapes!==void 0){let l=a.shapes;if(Array.isArray(l))for(let c=0,f=l.length;c<f;c++){let u=l[c];r(t.shapes,u)}else r(t.shapes,l)}}if(this.isSkinnedMesh&&(s.bindMode=this.bindMode,s.bindMatrix=this.bindMatrix.toArray(),this.skeleton!==void 0&&(r(t.skeletons,this.skeleton),s.skeleton=this.skeleton.uuid)),this.material!==void 0)if(Array.isArray(this.material)){let a=[];for(let l=0,c=this.material.length;l<c;l++)a.push(r(t.materials,this.material[l]));s.material=a}else s.material=r(t.materials,this.material);if(this.children.length>0){s.children=[];for(let a=0;a<this.children.length;a++)s.children.push(this.children[a].toJSON(t).object)}if(this.animations.length>0){s.animations=[];for(let a=0;a<this.animations.length;a++){let l=this.animations[a];s.animations.push(r(t.animations,l))}}if(e){let a=o(t.geometries),l=o(t.materials),c=o(t.textures),f=o(t.images),u=o(t.shapes),h=o(t.skeletons),p=o(t.animations),x=o(t.nodes);a.length>0&&(n.geometries=a),l.length>0&&(n.materials=l),c.length>0&&(n.textures=c),f.length>0&&(n.images=f),u.length>0&&(n.shapes=u),h.length>0&&(n.skeletons=h),p.length>0&&(n.animations=p),x.length>0&&(n.nodes=x)}return n.object=s,n;function o(a){let l=[];for(let c in a){let f=a[c];delete f.metadata,l.push(f)}return l}}clone(t){return new this.constructor().copy(this,t)}copy(t,e=!0){if(this.name=t.name,this.up.copy(t.up),this.position.copy(t.position),this.rotation.order=t.rotation.order,this.quaternion.copy(t.quaternion),this.scale.copy(t.scale),this.pivot=t.pivot!==null?t.pivot.clone():null,this.matrix.copy(t.matrix),this.matrixWorld.copy(t.matrixWorld),this.matrixAutoUpdate=t.matrixAutoUpdate,this.matrixWorldAutoUpdate=t.matrixWorldAutoUpdate,this.matrixWorldNeedsUpdate=t.matrixWorldNeedsUpdate,this.layers.mask=t.layers.mask,this.visible=t.visible,this.castShadow=t.castShadow,this.receiveShadow=t.receiveShadow,this.frustumCulled=t.frustumCulled,this.renderOrder=t.renderOrder,this.static=t.static,this.animations=t.animations.slice(),this.userData=JSON.parse(JSON.stringify(t.userData)),e===!0)for(let n=0;n<t.children.length;n++){let s=t.children[n];this.add(s.clone())}return this}dispose(){this.dispatchEvent({type:"dispose"})}};Pn.DEFAULT_UP=new W(0,1,0);Pn.DEFAULT_MATRIX_AUTO_UPDATE=!0;Pn.DEFAULT_MATRIX_WORLD_AUTO_UPDATE=!0;var qs=class extends Pn{constructor(){super(),this.isGroup=!0,this.type="Group"}},F_={type:"move"},Xr=class{constructor(){this._targetRay=null,this._grip=null,this._hand=null}getHandSpace(){return this._hand===null&&(this._hand=new qs,this._hand.matrixAutoUpdate=!1,this._hand.visible=!1,this._hand.joints={},this._hand.inputState={pinching:!1}),this._hand}getTargetRaySpace(){return this._targetRay===null&&(this._targetRay=new qs,this._targetRay.matrixAutoUpdate=!1,this._targetRay.visible=!1,this._targetRay.hasLinearVelocity=!1,this._targetRay.linearVelocity=new W,this._targetRay.hasAngularVelocity=!1,this._targetRay.angularVelocity=new W),this._targetRay}getGripSpace(){return this._grip===null&&(this._grip=new qs,this._grip.matrixAutoUpdate=!1,this._grip.visible=!1,this._grip.hasLinearVelocity=!1,this._grip.linearVelocity=new W,this._grip.hasAngularVelocity=!1,this._grip.angularVelocity=new W,this._grip.eventsEnabled=!1),this._grip}dispatchEvent(t){return this._targetRay!==null&&this._targetRay.dispatchEvent(t),this._grip!==null&&this._grip.dispatchEvent(t),this._hand!==null&&this._hand.dispatchEvent(t),this}connect(t){if(t&&t.hand){let e=this._hand;if(e)for(let n of t.hand.values())this._getHandJoint(e,n)}return this.dispatchEvent({type:"connected",data:t}),this}disconnect(t){return this.dispatchEvent({type:"disconnected",data:t}),this._targetRay!==null&&(this._targetRay.visible=!1),this._grip!==null&&(this._grip.visible=!1),this._hand!==null&&(this._hand.visible=!1),this}update(t,e,n){let s=null,r=null,o=null,a=this._targetRay,l=this._grip,c=this._hand;if(t&&e.session.visibilityState!=="visible-blurred"){if(c&&t.hand){o=!0;for(let w of t.hand.values()){let m=e.getJointPose(w,n),d=this._getHandJoint(c,w);m!==null&&(d.matrix.fromArray(m.transform.matrix),d.matrix.decompose(d.position,d.quaternion,d.scale),d.matrixWorldNeedsUpdate=!0,d.jointRadius=m.radius),d.visible=m!==null}let f=c.joints["index-finger-tip"],u=c.joints["thumb-tip"],h=f.position.distanceTo(u.position),p=.02,x=.005;c.inputState.pinching&&h>p+x?(c.inputState.pinching=!1,this.dispatchEvent({type:"pinchend",handedness:t.handedness,target:this})):!c.inputState.pinching&&h<=p-x&&(c.inputState.pinching=!0,this.dispatchEvent({type:"pinchstart",handedness:t.handedness,target:this}))}else l!==null&&t.gripSpace&&(r=e.getPose(t.gripSpace,n),r!==null&&(l.matrix.fromArray(r.transform.matrix),l.matrix.decompose(l.position,l.quaternion,l.scale),l.matrixWorldNeedsUpdate=!0,r.linearVelocity?(l.hasLinearVelocity=!0,l.linearVelocity.copy(r.linearVelocity)):l.hasLinearVelocity=!1,r.angularVelocity?(l.hasAngularVelocity=!0,l.angularVelocity.copy(r.angularVelocity)):l.hasAngularVelocity=!1,l.eventsEnabled&&l.dispatchEvent({type:"gripUpdated",data:t,target:this})));a!==null&&(s=e.getPose(t.targetRaySpace,n),s===null&&r!==null&&(s=r),s!==null&&(a.matrix.fromArray(s.transform.matrix),a.matrix.decompose(a.position,a.quaternion,a.scale),a.matrixWorldNeedsUpdate=!0,s.linearVelocity?(a.hasLinearVelocity=!0,a.linearVelocity.copy(s.linearVelocity)):a.hasLinearVelocity=!1,s.angularVelocity?(a.hasAngularVelocity=!0,a.angularVelocity.copy(s.angularVelocity)):a.hasAngularVelocity=!1,this.dispatchEvent(F_)))}return a!==null&&(a.visible=s!==null),l!==null&&(l.visible=r!==null),c!==null&&(c.visible=o!==null),this}_getHandJoint(t,e){if(t.joints[e.jointName]===void 0){let n=new qs;n.matrixAutoUpdate=!1,n.visible=!1,t.joints[e.jointName]=n,t.add(n)}return t.joints[e.jointName]}},jp={aliceblue:15792383,antiquewhite:16444375,aqua:65535,aquamarine:8388564,azure:15794175,beige:16119260,bisque:16770244,black:0,blanchedalmond:16772045,blue:255,blueviolet:9055202,brown:10824234,burlywood:14596231,cadetblue:6266528,chartreuse:8388352,chocolate:13789470,coral:16744272,cornflowerblue:6591981,cornsilk:16775388,crimson:14423100,cyan:65535,darkblue:139,darkcyan:35723,darkgoldenrod:12092939,darkgray:11119017,darkgreen:25600,darkgrey:11119017,darkkhaki:12433259,darkmagenta:9109643,darkolivegreen:5597999,darkorange:16747520,darkorchid:10040012,darkred:9109504,darksalmon:15308410,darkseagreen:9419919,darkslateblue:4734347,darkslategray:3100495,darkslategrey:3100495,darkturquoise:52945,darkviolet:9699539,deeppink:16716947,deepskyblue:49151,dimgray:6908265,dimgrey:6908265,dodgerblue:2003199,firebrick:11674146,floralwhite:16775920,forestgreen:2263842,fuchsia:16711935,gainsboro:14474460,ghostwhite:16316671,gold:16766720,goldenrod:14329120,gray:8421504,green:32768,greenyellow:11403055,grey:8421504,honeydew:15794160,hotpink:16738740,indianred:13458524,indigo:4915330,ivory:16777200,khaki:15787660,lavender:15132410,lavenderblush:16773365,lawngreen:8190976,lemonchiffon:16775885,lightblue:11393254,lightcoral:15761536,lightcyan:14745599,lightgoldenrodyellow:16448210,lightgray:13882323,lightgreen:9498256,lightgrey:13882323,lightpink:16758465,lightsalmon:16752762,lightseagreen:2142890,lightskyblue:8900346,lightslategray:7833753,lightslategrey:7833753,lightsteelblue:11584734,lightyellow:16777184,lime:65280,limegreen:3329330,linen:16445670,magenta:16711935,maroon:8388608,mediumaquamarine:6737322,mediumblue:205,mediumorchid:12211667,mediumpurple:9662683,mediumseagreen:3978097,mediumslateblue:8087790,mediumspringgreen:64154,mediumturquoise:4772300,mediumvioletred:13047173,midnightblue:1644912,mintcream:16121850,mistyrose:16770273,moccasin:16770229,navajowhite:16768685,navy:128,oldlace:16643558,olive:8421376,olivedrab:7048739,orange:16753920,orangered:16729344,orchid:14315734,palegoldenrod:15657130,palegreen:10025880,paleturquoise:11529966,palevioletred:14381203,papayawhip:16773077,peachpuff:16767673,peru:13468991,pink:16761035,plum:14524637,powderblue:11591910,purple:8388736,rebeccapurple:6697881,red:16711680,rosybrown:12357519,royalblue:4286945,saddlebrown:9127187,salmon:16416882,sandybrown:16032864,seagreen:3050327,seashell:16774638,sienna:10506797,silver:12632256,skyblue:8900331,slateblue:6970061,slategray:7372944,slategrey:7372944,snow:16775930,springgreen:65407,steelblue:4620980,tan:13808780,teal:32896,thistle:14204888,tomato:16737095,turquoise:4251856,violet:15631086,wheat:16113331,white:16777215,whitesmoke:16119285,yellow:16776960,yellowgreen:10145074},xs={h:0,s:0,l:0},Ba={h:0,s:0,l:0};function Ph(i,t,e){return e<0&&(e+=1),e>1&&(e-=1),e<1/6?i+(t-i)*6*e:e<1/2?t:e<2/3?i+(t-i)*6*(2/3-e):i}var ae=class{constructor(t,e,n){return this.isColor=!0,this.r=1,this.g=1,this.b=1,this.set(t,e,n)}set(t,e,n){if(e===void 0&&n===void 0){let s=t;s&&s.isColor?this.copy(s):typeof s=="number"?this.setHex(s):typeof s=="string"&&this.setStyle(s)}else this.setRGB(t,e,n);return this}setScalar(t){return this.r=t,this.g=t,this.b=t,this}setHex(t,e=ii){return t=Math.floor(t),this.r=(t>>16&255)/255,this.g=(t>>8&255)/255,this.b=(t&255)/255,ge.colorSpaceToWorking(this,e),this}setRGB(t,e,n,s=ge.workingColorSpace){return this.r=t,this.g=e,this.b=n,ge.colorSpaceToWorking(this,s),this}setHSL(t,e,n,s=ge.workingColorSpace){if(t=bu(t,1),e=fe(e,0,1),n=fe(n,0,1),e===0)this.r=this.g=this.b=n;else{let r=n<=.5?n*(1+e):n+e-n*e,o=2*n-r;this.r=Ph(o,r,t+1/3),this.g=Ph(o,r,t),this.b=Ph(o,r,t-1/3)}return ge.colorSpaceToWorking(this,s),this}setStyle(t,e=ii){function n(r){r!==void 0&&parseFloat(r)<1&&qt("Color: Alpha component of "+t+" will be ignored.")}let s;if(s=/^(\w+)\(([^\)]*)\)/.exec(t)){let r,o=s[1],a=s[2];switch(o){case"rgb":case"rgba":if(r=/^\s*(\d+)\s*,\s*(\d+)\s*,\s*(\d+)\s*(?:,\s*(\d+(?:\.\d+)?|\.\d+)\s*)?$/.exec(a))return n(r[4]),this.setRGB(Math.min(255,parseInt(r[1],10))/255,Math.min(255,parseInt(r[2],10))/255,Math.min(255,parseInt(r[3],10))/255,e);if(r=/^\s*(\d+(?:\.\d+)?|\.\d+)\%\s*,\s*(\d+(?:\.\d+)?|\.\d+)\%\s*,\s*(\d+(?:\.\d+)?|\.\d+)\%\s*(?:,\s*(\d+(?:\.\d+)?|\.\d+)\s*)?$/.exec(a))return n(r[4]),this.setRGB(Math.min(100,parseFloat(r[1]))/100,Math.min(100,parseFloat(r[2]))/100,Math.min(100,parseFloat(r[3]))/100,e);break;case"hsl":case"hsla":if(r=/^\s*([+-]?(?:\d+(?:\.\d+)?|\.\d+))\s*,\s*(\d+(?:\.\d+)?|\.\d+)\%\s*,\s*(\d+(?:\.\d+)?|\.\d+)\%\s*(?:,\s*(\d+(?:\.\d+)?|\.\d+)\s*)?$/.exec(a))return n(r[4]),this.setHSL(parseFloat(r[1])/360,parseFloat(r[2])/100,parseFloat(r[3])/100,e);break;default:qt("Color: Unknown color model "+t)}}else if(s=/^\#([A-Fa-f\d]+)$/.exec(t)){let r=s[1],o=r.length;if(o===3)return this.setRGB(parseInt(r.charAt(0),16)/15,parseInt(r.charAt(1),16)/15,parseInt(r.charAt(2),16)/15,e);if(o===6)return this.setHex(parseInt(r,16),e);qt("Color: Invalid hex color "+t)}else if(t&&t.length>0)return this.setColorName(t,e);return this}setColorName(t,e=ii){let n=jp[t.toLowerCase()];return n!==void 0?this.setHex(n,e):qt("Color: Unknown color "+t),this}clone(){return new this.constructor(this.r,this.g,this.b)}copy(t){return this.r=t.r,this.g=t.g,this.b=t.b,this}copySRGBToLinear(t){return this.r=es(t.r),this.g=es(t.g),this.b=es(t.b),this}copyLinearToSRGB(t){return this.r=kr(t.r),this.g=kr(t.g),this.b=kr(t.b),this}convertSRGBToLinear(){return this.copySRGBToLinear(this),this}convertLinearToSRGB(){return this.copyLinearToSRGB(this),this}getHex(t=ii){return ge.workingToColorSpace(Rn.copy(this),t),Math.round(fe(Rn.r*255,0,255))*65536+Math.round(fe(Rn.g*255,0,255))*256+Math.round(fe(Rn.b*255,0,255))}getHexString(t=ii){return("000000"+this.getHex(t).toString(16)).slice(-6)}getHSL(t,e=ge.workingColorSpace){ge.workingToColorSpace(Rn.copy(this),e);let n=Rn.r,s=Rn.g,r=Rn.b,o=Math.max(n,s,r),a=Math.min(n,s,r),l,c,f=(a+o)/2;if(a===o)l=0,c=0;else{let u=o-a;switch(c=f<=.5?u/(o+a):u/(2-o-a),o){case n:l=(s-r)/u+(s<r?6:0);break;case s:l=(r-n)/u+2;break;case r:l=(n-s)/u+4;break}l/=6}return t.h=l,t.s=c,t.l=f,t}getRGB(t,e=ge.workingColorSpace){return ge.workingToColorSpace(Rn.copy(this),e),t.r=Rn.r,t.g=Rn.g,t.b=Rn.b,t}getStyle(t=ii){ge.workingToColorSpace(Rn.copy(this),t);let e=Rn.r,n=Rn.g,s=Rn.b;return t!==ii?`color(${t} ${e.toFixed(3)} ${n.toFixed(3)} ${s.toFixed(3)})`:`rgb(${Math.round(e*255)},${Math.round(n*255)},${Math.round(s*255)})`}offsetHSL(t,e,n){return this.getHSL(xs),this.setHSL(xs.h+t,xs.s+e,xs.l+n)}add(t){return this.r+=t.r,this.g+=t.g,this.b+=t.b,this}addColors(t,e){return this.r=t.r+e.r,this.g=t.g+e.g,this.b=t.b+e.b,this}addScalar(t){return this.r+=t,this.g+=t,this.b+=t,this}sub(t){return this.r=Math.max(0,this.r-t.r),this.g=Math.max(0,this.g-t.g),this.b=Math.max(0,this.b-t.b),this}multiply(t){return this.r*=t.r,this.g*=t.g,this.b*=t.b,this}multiplyScalar(t){return this.r*=t,this.g*=t,this.b*=t,this}lerp(t,e){return this.r+=(t.r-this.r)*e,this.g+=(t.g-this.g)*e,this.b+=(t.b-this.b)*e,this}lerpColors(t,e,n){return this.r=t.r+(e.r-t.r)*n,this.g=t.g+(e.g-t.g)*n,this.b=t.b+(e.b-t.b)*n,this}lerpHSL(t,e){this.getHSL(xs),t.getHSL(Ba);let n=Do(xs.h,Ba.h,e),s=Do(xs.s,Ba.s,e),r=Do(xs.l,Ba.l,e);return this.setHSL(n,s,r),this}setFromVector3(t){return this.r=t.x,this.g=t.y,this.b=t.z,this}applyMatrix3(t){let e=this.r,n=this.g,s=this.b,r=t.elements;return this.r=r[0]*e+r[3]*n+r[6]*s,this.g=r[1]*e+r[4]*n+r[7]*s,this.b=r[2]*e+r[5]*n+r[8]*s,this}equals(t){return t.r===this.r&&t.g===this.g&&t.b===this.b}fromArray(t,e=0){return this.r=t[e],this.g=t[e+1],this.b=t[e+2],this}toArray(t=[],e=0){return t[e]=this.r,t[e+1]=this.g,t[e+2]=this.b,t}fromBufferAttribute(t,e){return this.r=t.getX(e),this.g=t.getY(e),this.b=t.getZ(e),this}toJSON(){return this.getHex()}*[Symbol.iterator](){yield this.r,yield this.g,yield this.b}},Rn=new ae;ae.NAMES=jp;var Ys=class extends Pn{constructor(){super(),this.isScene=!0,this.type="Scene",this.background=null,this.environment=null,this.fog=null,this.backgroundBlurriness=0,this.backgroundIntensity=1,this.backgroundRotation=new is,this.environmentIntensity=1,this.environmentRotation=new is,this.overrideMaterial=null,typeof __THREE_DEVTOOLS__<"u"&&__THREE_DEVTOOLS__.dispatchEvent(new CustomEvent("observe",{detail:this}))}copy(t,e){return super.copy(t,e),this.background=t.background!==null?t.background.clone():null,this.environment=t.environment!==null?t.environment.clone():null,this.fog=t.fog!==null?t.fog.clone():null,this.backgroundBlurriness=t.backgroundBlurriness,this.backgroundIntensity=t.backgroundIntensity,this.backgroundRotation.copy(t.backgroundRotation),this.environmentIntensity=t.environmentIntensity,this.environmentRotation.copy(t.environmentRotation),this.overrideMaterial=t.overrideMaterial!==null?t.overrideMaterial.clone():null,this.matrixAutoUpdate=t.matrixAutoUpdate,this}toJSON(t){let e=super.toJSON(t);return this.fog!==null&&(e.object.fog=this.fog.toJSON()),e.object.backgroundBlurriness=this.backgroundBlurriness,e.object.backgroundIntensity=this.backgroundIntensity,e.object.backgroundRotation=this.backgroundRotation.toArray(),e.object.environmentIntensity=this.environmentIntensity,e.object.environmentRotation=this.environmentRotation.toArray(),e}},wi=new W,Ki=new W,Ih=new W,ji=new W,Cr=new W,Pr=new W,Qd=new W,Lh=new W,Dh=new W,Nh=new W,Uh=new Xe,Fh=new Xe,Oh=new Xe,Ms=class i{constructor(t=new W,e=new W,n=new W){this.a=t,this.b=e,this.c=n}static getNormal(t,e,n,s){s.subVectors(n,e),wi.subVectors(t,e),s.cross(wi);let r=s.lengthSq();return r>0?s.multiplyScalar(1/Math.sqrt(r)):s.set(0,0,0)}static getBarycoord(t,e,n,s,r){wi.subVectors(s,e),Ki.subVectors(n,e),Ih.subVectors(t,e);let o=wi.dot(wi),a=wi.dot(Ki),l=wi.dot(Ih),c=Ki.dot(Ki),f=Ki.dot(Ih),u=o*c-a*a;if(u===0)return r.set(0,0,0),null;let h=1/u,p=(c*l-a*f)*h,x=(o*f-a*l)*h;return r.set(1-p-x,x,p)}static containsPoint(t,e,n,s){return this.getBarycoord(t,e,n,s,ji)===null?!1:ji.x>=0&&ji.y>=0&&ji.x+ji.y<=1}static getInterpolation(t,e,n,s,r,o,a,l){return this.getBarycoord(t,e,n,s,ji)===null?(l.x=0,l.y=0,"z"in l&&(l.z=0),"w"in l&&(l.w=0),null):(l.setScalar(0),l.addScaledVector(r,ji.x),l.addScaledVector(o,ji.y),l.addScaledVector(a,ji.z),l)}static getInterpolatedAttribute(t,e,n,s,r,o){return Uh.setScalar(0),Fh.setScalar(0),Oh.setScalar(0),Uh.fromBufferAttribute(t,e),Fh.fromBufferAttribute(t,n),Oh.fromBufferAttribute(t,s),o.setScalar(0),o.addScaledVector(Uh,r.x),o.addScaledVector(Fh,r.y),o.addScaledVector(Oh,r.z),o}static isFrontFacing(t,e,n,s){return wi.subVectors(n,e),Ki.subVectors(t,e),wi.cross(Ki).dot(s)<0}set(t,e,n){return this.a.copy(t),this.b.copy(e),this.c.copy(n),this}setFromPointsAndIndices(t,e,n,s){return this.a.copy(t[e]),this.b.copy(t[n]),this.c.copy(t[s]),this}setFromAttributeAndIndices(t,e,n,s){return this.a.fromBufferAttribute(t,e),this.b.fromBufferAttribute(t,n),this.c.fromBufferAttribute(t,s),this}clone(){return new this.constructor().copy(this)}copy(t){return this.a.copy(t.a),this.b.copy(t.b),this.c.copy(t.c),this}getArea(){return wi.subVectors(this.c,this.b),Ki.subVectors(this.a,this.b),wi.cross(Ki).length()*.5}getMidpoint(t){return t.addVectors(this.a,this.b).add(this.c).multiplyScalar(1/3)}getNormal(t){return i.getNormal(this.a,this.b,this.c,t)}getPlane(t){return t.setFromCoplanarPoints(this.a,this.b,this.c)}getBarycoord(t,e){return i.getBarycoord(t,this.a,this.b,this.c,e)}getInterpolation(t,e,n,s,r){return i.getInterpolation(t,this.a,this.b,this.c,e,n,s,r)}containsPoint(t){return i.containsPoint(t,this.a,this.b,this.c)}isFrontFacing(t){return i.isFrontFacing(this.a,this.b,this.c,t)}intersectsBox(t){return t.intersectsTriangle(this)}closestPointToPoint(t,e){let n=this.a,s=this.b,r=this.c,o,a;Cr.subVectors(s,n),Pr.subVectors(r,n),Lh.subVectors(t,n);let l=Cr.dot(Lh),c=Pr.dot(Lh);if(l<=0&&c<=0)return e.copy(n);Dh.subVectors(t,s);let f=Cr.dot(Dh),u=Pr.dot(Dh);if(f>=0&&u<=f)return e.copy(s);let h=l*u-f*c;if(h<=0&&l>=0&&f<=0&&l-f>0)return o=l/(l-f),e.copy(n).addScaledVector(Cr,o);Nh.subVectors(t,r);let p=Cr.dot(Nh),x=Pr.dot(Nh);if(x>=0&&p<=x)return e.copy(r);let w=p*c-l*x;if(w<=0&&c>=0&&x<=0)return a=c/(c-x),e.copy(n).addScaledVector(Pr,a);let m=f*x-p*u;if(m<=0&&u-f>=0&&p-x>=0)return Qd.subVectors(r,s),a=(u-f)/(u-f+(p-x)),e.copy(s).addScaledVector(Qd,a);let d=1/(m+w+h);return o=w*d,a=h*d,e.copy(n).addScaledVector(Cr,o).addScaledVector(Pr,a)}equals(t){return t.a.equals(this.a)&&t.b.equals(this.b)&&t.c.equals(this.c)}},fi=class{constructor(t=new W(1/0,1/0,1/0),e=new W(-1/0,-1/0,-1/0)){this.isBox3=!0,this.min=t,this.max=e}set(t,e){return this.min.copy(t),this.max.copy(e),this}setFromArray(t){this.makeEmpty();for(let e=0,n=t.length;e<n;e+=3)this.expandByPoint(Ei.fromArray(t,e));return this}setFromBufferAttribute(t){this.makeEmpty();for(let e=0,n=t.count;e<n;e++)this.expandByPoint(Ei.fromBufferAttribute(t,e));return this}setFromPoints(t){this.makeEmpty();for(let e=0,n=t.length;e<n;e++)this.expandByPoint(t[e]);return this}setFromCenterAndSize(t,e){let n=Ei.copy(e).multiplyScalar(.5);return this.min.copy(t).sub(n),this.max.copy(t).add(n),this}setFromObject(t,e=!1){return this.makeEmpty(),this.expandByObject(t,e)}clone(){return new this.constructor().copy(this)}copy(t){return this.min.copy(t.min),this.max.copy(t.max),this}makeEmpty(){return this.min.x=this.min.y=this.min.z=1/0,this.max.x=this.max.y=this.max.z=-1/0,this}isEmpty(){return this.max.x<this.min.x||this.max.y<this.min.y||this.max.z<this.min.z}getCenter(t){return this.isEmpty()?t.set(0,0,0):t.addVectors(this.min,this.max).multiplyScalar(.5)}getSize(t){return this.isEmpty()?t.set(0,0,0):t.subVectors(this.max,this.min)}expandByPoint(t){return this.min.min(t),this.max.max(t),this}expandByVector(t){return this.min.sub(t),this.max.add(t),this}expandByScalar(t){return this.min.addScalar(-t),this.max.addScalar(t),this}expandByObject(t,e=!1){t.updateWorldMatrix(!1,!1);let n=t.geometry;if(n!==void 0){let r=n.getAttribute("position");if(e===!0&&r!==void 0&&t.isInstancedMesh!==!0&&t.isBatchedMesh!==!0)for(let o=0,a=r.count;o<a;o++)t.isMesh===!0?t.getVertexPosition(o,Ei):Ei.fromBufferAttribute(r,o),Ei.applyMatrix4(t.matrixWorld),this.expandByPoint(Ei);else t.boundingBox!==void 0?(t.boundingBox===null&&t.computeBoundingBox(),ka.copy(t.boundingBox)):(n.boundingBox===null&&n.computeBoundingBox(),ka.copy(n.boundingBox)),ka.applyMatrix4(t.matrixWorld),this.union(ka)}let s=t.children;for(let r=0,o=s.length;r<o;r++)this.expandByObject(s[r],e);return this}containsPoint(t){return t.x>=this.min.x&&t.x<=this.max.x&&t.y>=this.min.y&&t.y<=this.max.y&&t.z>=this.min.z&&t.z<=this.max.z}containsBox(t){return this.min.x<=t.min.x&&t.max.x<=this.max.x&&this.min.y<=t.min.y&&t.max.y<=this.max.y&&this.min.z<=t.min.z&&t.max.z<=this.max.z}getParameter(t,e){return e.set((t.x-this.min.x)/(this.max.x-this.min.x),(t.y-this.min.y)/(this.max.y-this.min.y),(t.z-this.min.z)/(this.max.z-this.min.z))}intersectsBox(t){return t.max.x>=this.min.x&&t.min.x<=this.max.x&&t.max.y>=this.min.y&&t.min.y<=this.max.y&&t.max.z>=this.min.z&&t.min.z<=this.max.z}intersectsSphere(t){return this.clampPoint(t.center,Ei),Ei.distanceToSquared(t.center)<=t.radius*t.radius}intersectsPlane(t){let e,n;return t.normal.x>0?(e=t.normal.x*this.min.x,n=t.normal.x*this.max.x):(e=t.normal.x*this.max.x,n=t.normal.x*this.min.x),t.normal.y>0?(e+=t.normal.y*this.min.y,n+=t.normal.y*this.max.y):(e+=t.normal.y*this.max.y,n+=t.normal.y*this.min.y),t.normal.z>0?(e+=t.normal.z*this.min.z,n+=t.normal.z*this.max.z):(e+=t.normal.z*this.max.z,n+=t.normal.z*this.min.z),e<=-t.constant&&n>=-t.constant}intersectsTriangle(t){if(this.isEmpty())return!1;this.getCenter(To),za.subVectors(this.max,To),Ir.subVectors(t.a,To),Lr.subVectors(t.b,To),Dr.subVectors(t.c,To),ys.subVectors(Lr,Ir),vs.subVectors(Dr,Lr),Gs.subVectors(Ir,Dr);let e=[0,-ys.z,ys.y,0,-vs.z,vs.y,0,-Gs.z,Gs.y,ys.z,0,-ys.x,vs.z,0,-vs.x,Gs.z,0,-Gs.x,-ys.y,ys.x,0,-vs.y,vs.x,0,-Gs.y,Gs.x,0];return!Bh(e,Ir,Lr,Dr,za)||(e=[1,0,0,0,1,0,0,0,1],!Bh(e,Ir,Lr,Dr,za))?!1:(Va.crossVectors(ys,vs),e=[Va.x,Va.y,Va.z],Bh(e,Ir,Lr,Dr,za))}clampPoint(t,e){return e.copy(t).clamp(this.min,this.max)}distanceToPoint(t){return this.clampPoint(t,Ei).distanceTo(t)}getBoundingSphere(t){return this.isEmpty()?t.makeEmpty():(this.getCenter(t.center),t.radius=this.getSize(Ei).length()*.5),t}intersect(t){return this.min.max(t.min),this.max.min(t.max),this.isEmpty()&&this.makeEmpty(),this}union(t){return this.min.min(t.min),this.max.max(t.max),this}applyMatrix4(t){return this.isEmpty()?this:(Qi[0].set(this.min.x,this.min.y,this.min.z).applyMatrix4(t),Qi[1].set(this.min.x,this.min.y,this.max.z).applyMatrix4(t),Qi[2].set(this.min.x,this.max.y,this.min.z).applyMatrix4(t),Qi[3].set(this.min.x,this.max.y,this.max.z).applyMatrix4(t),Qi[4].set(this.max.x,this.min.y,this.min.z).applyMatrix4(t),Qi[5].set(this.max.x,this.min.y,this.max.z).applyMatrix4(t),Qi[6].set(this.max.x,this.max.y,this.min.z).applyMatrix4(t),Qi[7].set(this.max.x,this.max.y,this.max.z).applyMatrix4(t),this.setFromPoints(Qi),this)}translate(t){return this.min.add(t),this.max.add(t),this}equals(t){return t.min.equals(this.min)&&t.max.equals(this.max)}toJSON(){return{min:this.min.toArray(),max:this.max.toArray()}}fromJSON(t){return this.min.fromArray(t.min),this.max.fromArray(t.max),this}},Qi=[new W,new W,new W,new W,new W,new W,new W,new W],Ei=new W,ka=new fi,Ir=new W,Lr=new W,Dr=new W,ys=new W,vs=new W,Gs=new W,To=new W,za=new W,Va=new W,Hs=new W;function Bh(i,t,e,n,s){for(let r=0,o=i.length-3;r<=o;r+=3){Hs.fromArray(i,r);let a=s.x*Math.abs(Hs.x)+s.y*Math.abs(Hs.y)+s.z*Math.abs(Hs.z),l=t.dot(Hs),c=e.dot(Hs),f=n.dot(Hs);if(Math.max(-Math.max(l,c,f),Math.min(l,c,f))>a)return!1}return!0}var ln=new W,Ga=new Jt,O_=0,Hn=class extends Ti{constructor(t,e,n=!1){if(super(),Array.isArray(t))throw new TypeError("THREE.BufferAttribute: array should be a Typed Array.");this.isBufferAttribute=!0,Object.defineProperty(this,"id",{value:O_++}),this.name="",this.array=t,this.itemSize=e,this.count=t!==void 0?t.length/e:0,this.normalized=n,this.usage=Xp,this.updateRanges=[],this.gpuType=gi,this.version=0,this._normalizationScale=t!==void 0?Eu(t):void 0}onUploadCallback(){}set needsUpdate(t){t===!0&&this.version++}setUsage(t){return this.usage=t,this}addUpdateRange(t,e){this.updateRanges.push({start:t,count:e})}clearUpdateRanges(){this.updateRanges.length=0}copy(t){return this.name=t.name,this.array=new t.array.constructor(t.array),this.itemSize=t.itemSize,this.count=t.count,this.normalized=t.normalized,this.usage=t.usage,this.gpuType=t.gpuType,this._normalizationScale=t._normalizationScale,this}copyAt(t,e,n){t*=this.itemSize,n*=e.itemSize;for(let s=0,r=this.itemSize;s<r;s++)this.array[t+s]=e.array[n+s];return this}copyArray(t){return this.array.set(t),this}applyMatrix3(t){if(this.itemSize===2)for(let e=0,n=this.count;e<n;e++)Ga.fromBufferAttribute(this,e),Ga.applyMatrix3(t),this.setXY(e,Ga.x,Ga.y);else if(this.itemSize===3)for(let e=0,n=this.count;e<n;e++)ln.fromBufferAttribute(this,e),ln.applyMatrix3(t),this.setXYZ(e,ln.x,ln.y,ln.z);return this}applyMatrix4(t){for(let e=0,n=this.count;e<n;e++)ln.fromBufferAttribute(this,e),ln.applyMatrix4(t),this.setXYZ(e,ln.x,ln.y,ln.z);return this}applyNormalMatrix(t){for(let e=0,n=this.count;e<n;e++)ln.fromBufferAttribute(this,e),ln.applyNormalMatrix(t),this.setXYZ(e,ln.x,ln.y,ln.z);return this}transformDirection(t){for(let e=0,n=this.count;e<n;e++)ln.fromBufferAttribute(this,e),ln.transformDirection(t),this.setXYZ(e,ln.x,ln.y,ln.z);return this}set(t,e=0){return this.array.set(t,e),this}getComponent(t,e){let n=this.array[t*this.itemSize+e];return this.normalized&&(n=this._denormalize(n)),n}setComponent(t,e,n){return this.normalized&&(n=this._normalize(n)),this.array[t*this.itemSize+e]=n,this}getX(t){let e=this.array[t*this.itemSize];return this.normalized&&(e=this._denormalize(e)),e}setX(t,e){return this.normalized&&(e=this._normalize(e)),this.array[t*this.itemSize]=e,this}getY(t){let e=this.array[t*this.itemSize+1];return this.normalized&&(e=this._denormalize(e)),e}setY(t,e){return this.normalized&&(e=this._normalize(e)),this.array[t*this.itemSize+1]=e,this}getZ(t){let e=this.array[t*this.itemSize+2];return this.normalized&&(e=this._denormalize(e)),e}setZ(t,e){return this.normalized&&(e=this._normalize(e)),this.array[t*this.itemSize+2]=e,this}getW(t){let e=this.array[t*this.itemSize+3];return this.normalized&&(e=this._denormalize(e)),e}setW(t,e){return this.normalized&&(e=this._normalize(e)),this.array[t*this.itemSize+3]=e,this}setXY(t,e,n){return t*=this.itemSize,this.normalized&&(e=this._normalize(e),n=this._normalize(n)),this.array[t+0]=e,this.array[t+1]=n,this}setXYZ(t,e,n,s){return t*=this.itemSize,this.normalized&&(e=this._normalize(e),n=this._normalize(n),s=this._normalize(s)),this.array[t+0]=e,this.array[t+1]=n,this.array[t+2]=s,this}setXYZW(t,e,n,s,r){return t*=this.itemSize,this.normalized&&(e=this._normalize(e),n=this._normalize(n),s=this._normalize(s),r=this._normalize(r)),this.array[t+0]=e,this.array[t+1]=n,this.array[t+2]=s,this.array[t+3]=r,this}onUpload(t){return this.onUploadCallback=t,this}clone(){return new this.constructor(this.array,this.itemSize).copy(this)}toJSON(){let t={itemSize:this.itemSize,type:this.array.constructor.name,array:Array.from(this.array),normalized:this.normalized};return t.name=this.name,t.usage=this.usage,t.gpuType=this.gpuType,t}dispose(){this.dispatchEvent({type:"dispose"})}_denormalize(t){let e=this._normalizationScale;return e!==void 0?Math.max(t/e,-1):Jp(t,this.array)}_normalize(t){let e=this._normalizationScale;return e!==void 0?Math.round(t*e):Kp(t,this.array)}};var zo=class extends Hn{constructor(t,e,n){super(new Uint16Array(t),e,n)}};var Vo=class extends Hn{constructor(t,e,n){super(new Uint32Array(t),e,n)}};var bn=class extends Hn{constructor(t,e,n){super(new Float32Array(t),e,n)}},B_=new fi,Ao=new W,kh=new W,bs=class{constructor(t=new W,e=-1){this.isSphere=!0,this.center=t,this.radius=e}set(t,e){return this.center.copy(t),this.radius=e,this}setFromPoints(t,e){let n=this.center;e!==void 0?n.copy(e):B_.setFromPoints(t).getCenter(n);let s=0;for(let r=0,o=t.length;r<o;r++)s=Math.max(s,n.distanceToSquared(t[r]));return this.radius=Math.sqrt(s),this}copy(t){return this.center.copy(t.center),this.radius=t.radius,this}isEmpty(){return this.radius<0}makeEmpty(){return this.center.set(0,0,0),this.radius=-1,this}containsPoint(t){return t.distanceToSquared(this.center)<=this.radius*this.radius}distanceToPoint(t){return t.distanceTo(this.center)-this.radius}intersectsSphere(t){let e=this.radius+t.radius;return t.center.distanceToSquared(this.center)<=e*e}intersectsBox(t){return t.intersectsSphere(this)}intersectsPlane(t){return Math.abs(t.distanceToPoint(this.center))<=this.radius}clampPoint(t,e){let n=this.center.distanceToSquared(t);return e.copy(t),n>this.radius*this.radius&&(e.sub(this.center).normalize(),e.multiplyScalar(this.radius).add(this.center)),e}getBoundingBox(t){return this.isEmpty()?(t.makeEmpty(),t):(t.set(this.center,this.center),t.expandByScalar(this.radius),t)}applyMatrix4(t){return this.center.applyMatrix4(t),this.radius=this.radius*t.getMaxScaleOnAxis(),this}translate(t){return this.center.add(t),this}expandByPoint(t){if(this.isEmpty())return this.center.copy(t),this.radius=0,this;Ao.subVectors(t,this.center);let e=Ao.lengthSq();if(e>this.radius*this.radius){let n=Math.sqrt(e),s=(n-this.radius)*.5;this.center.addScaledVector(Ao,s/n),this.radius+=s}return this}union(t){return t.isEmpty()?this:this.isEmpty()?(this.copy(t),this):(this.center.equals(t.center)===!0?this.radius=Math.max(this.radius,t.radius):(kh.subVectors(t.center,this.center).setLength(t.radius),this.expandByPoint(Ao.copy(t.center).add(kh)),this.expandByPoint(Ao.copy(t.center).sub(kh))),this)}equals(t){return t.center.equals(this.center)&&t.radius===this.radius}clone(){return new this.constructor().copy(this)}toJSON(){return{radius:this.radius,center:this.center.toArray()}}fromJSON(t){return this.radius=t.radius,this.center.fromArray(t.center),this}},k_=0,hi=new Se,zh=new Pn,Nr=new W,ni=new fi,Ro=new fi,Mn=new W,di=class i extends Ti{constructor(){super(),this.isBufferGeometry=!0,Object.defineProperty(this,"id",{value:k_++}),this.uuid=io(),this.name="",this.type="BufferGeometry",this.index=null,this.indirect=null,this.indirectOffset=0,this.attributes={},this.morphAttributes={},this.morphTargetsRelative=!1,this.groups=[],this.boundingBox=null,this.boundingSphere=null,this.drawRange={start:0,count:1/0},this.userData={},this._transformed=!1}getIndex(){return this.index}setIndex(t){return Array.isArray(t)?this.index=new(h_(t)?Vo:zo)(t,1):this.index=t,this}setIndirect(t,e=0){return this.indirect=t,this.indirectOffset=e,this}getIndirect(){return this.indirect}getAttribute(t){return this.attributes[t]}setAttribute(t,e){return this.attributes[t]=e,this}deleteAttribute(t){return delete this.attributes[t],this}hasAttribute(t){return this.attributes[t]!==void 0}addGroup(t,e,n=0){this.groups.push({start:t,count:e,materialIndex:n})}clearGroups(){this.groups=[]}setDrawRange(t,e){this.drawRange.start=t,this.drawRange.count=e}applyMatrix4(t){let e=this.attributes.position;e!==void 0&&(e.applyMatrix4(t),e.needsUpdate=!0);let n=this.attributes.normal;if(n!==void 0){let r=new Qt().getNormalMatrix(t);n.applyNormalMatrix(r),n.needsUpdate=!0}let s=this.attributes.tangent;return s!==void 0&&(s.transformDirection(t),s.needsUpdate=!0),this.boundingBox!==null&&this.computeBoundingBox(),this.boundingSphere!==null&&this.computeBoundingSphere(),this._transformed=!0,this}applyQuaternion(t){return hi.makeRotationFromQuaternion(t),this.applyMatrix4(hi),this}rotateX(t){return hi.makeRotationX(t),this.applyMatrix4(hi),this}rotateY(t){return hi.makeRotationY(t),this.applyMatrix4(hi),this}rotateZ(t){return hi.makeRotationZ(t),this.applyMatrix4(hi),this}translate(t,e,n){return hi.makeTranslation(t,e,n),this.applyMatrix4(hi),this}scale(t,e,n){return hi.makeScale(t,e,n),this.applyMatrix4(hi),this}lookAt(t){return zh.lookAt(t),zh.updateMatrix(),this.applyMatrix4(zh.matrix),this}center(){return this.computeBoundingBox(),this.boundingBox.getCenter(Nr).negate(),this.translate(Nr.x,Nr.y,Nr.z),this}setFromPoints(t){let e=this.getAttribute("position");if(e===void 0){let n=[];for(let s=0,r=t.length;s<r;s++){let o=t[s];n.push(o.x,o.y,o.z||0)}this.setAttribute("position",new bn(n,3))}else{let n=Math.min(t.length,e.count);for(let s=0;s<n;s++){let r=t[s];e.setXYZ(s,r.x,r.y,r.z||0)}t.length>e.count&&qt("BufferGeometry: Buffer size too small for points data. Use .dispose() and create a new geometry."),e.needsUpdate=!0}return this}computeBoundingBox(){this.boundingBox===null&&(this.boundingBox=new fi);let t=this.attributes.position,e=this.morphAttributes.position;if(t&&t.isGLBufferAttribute){jt("BufferGeometry.computeBoundingBox(): GLBufferAttribute requires a manual bounding box.",this),this.boundingBox.set(new W(-1/0,-1/0,-1/0),new W(1/0,1/0,1/0));return}if(t!==void 0){if(this.boundingBox.setFromBufferAttribute(t),e)for(let n=0,s=e.length;n<s;n++){let r=e[n];ni.setFromBufferAttribute(r),this.morphTargetsRelative?(Mn.addVectors(this.boundingBox.min,ni.min),this.boundingBox.expandByPoint(Mn),Mn.addVectors(this.boundingBox.max,ni.max),this.boundingBox.expandByPoint(Mn)):(this.boundingBox.expandByPoint(ni.min),this.boundingBox.expandByPoint(ni.max))}}else this.boundingBox.makeEmpty();(isNaN(this.boundingBox.min.x)||isNaN(this.boundingBox.min.y)||isNaN(this.boundingBox.min.z))&&jt('BufferGeometry.computeBoundingBox(): Computed min/max have NaN values. The "position" attribute is likely to have NaN values.',this)}computeBoundingSphere(){this.boundingSphere===null&&(this.boundingSphere=new bs);let t=this.attributes.position,e=this.morphAttributes.position;if(t&&t.isGLBufferAttribute){jt("BufferGeometry.computeBoundingSphere(): GLBufferAttribute requires a manual bounding sphere.",this),this.boundingSphere.set(new W,1/0);return}if(t){let n=this.boundingSphere.center;if(ni.setFromBufferAttribute(t),e)for(let r=0,o=e.length;r<o;r++){let a=e[r];Ro.setFromBufferAttribute(a),this.morphTargetsRelative?(Mn.addVectors(ni.min,Ro.min),ni.expandByPoint(Mn),Mn.addVectors(ni.max,Ro.max),ni.expandByPoint(Mn)):(ni.expandByPoint(Ro.min),ni.expandByPoint(Ro.max))}ni.getCenter(n);let s=0;for(let r=0,o=t.count;r<o;r++)Mn.fromBufferAttribute(t,r),s=Math.max(s,n.distanceToSquared(Mn));if(e)for(let r=0,o=e.length;r<o;r++){let a=e[r],l=this.morphTargetsRelative;for(let c=0,f=a.count;c<f;c++)Mn.fromBufferAttribute(a,c),l&&(Nr.fromBufferAttribute(t,c),Mn.add(Nr)),s=Math.max(s,n.distanceToSquared(Mn))}this.boundingSphere.radius=Math.sqrt(s),isNaN(this.boundingSphere.radius)&&jt('BufferGeometry.computeBoundingSphere(): Computed radius is NaN. The "position" attribute is likely to have NaN values.',this)}}computeTangents(){let t=this.index,e=this.attributes;if(t===null||e.position===void 0||e.normal===void 0||e.uv===void 0){jt("BufferGeometry: .computeTangents() failed. Missing required attributes (index, position, normal or uv)");return}let n=e.position,s=e.normal,r=e.uv,o=this.getAttribute("tangent");(o===void 0||o.count!==n.count)&&(o=new Hn(new Float32Array(4*n.count),4),this.setAttribute("tangent",o));let a=[],l=[],c=new Uint8Array(n.count);for(let B=0;B<n.count;B++)a[B]=new W,l[B]=new W;let f=new W,u=new W,h=new W,p=new Jt,x=new Jt,w=new Jt,m=new W,d=new W;function v(B,N,D){c[B]=c[N]=c[D]=1,f.fromBufferAttribute(n,B),u.fromBufferAttribute(n,N),h.fromBufferAttribute(n,D),p.fromBufferAttribute(r,B),x.fromBufferAttribute(r,N),w.fromBufferAttribute(r,D),u.sub(f),h.sub(f),x.sub(p),w.sub(p);let k=1/(x.x*w.y-w.x*x.y);isFinite(k)&&(m.copy(u).multiplyScalar(w.y).addScaledVector(h,-x.y).multiplyScalar(k),d.copy(h).multiplyScalar(x.x).addScaledVector(u,-w.x).multiplyScalar(k),a[B].add(m),a[N].add(m),a[D].add(m),l[B].add(d),l[N].add(d),l[D].add(d))}let C=this.groups;C.length===0&&(C=[{start:0,count:t.count}]);for(let B=0,N=C.length;B<N;++B){let D=C[B],k=D.start,G=D.count;for(let L=k,H=k+G;L<H;L+=3)v(t.getX(L+0),t.getX(L+1),t.getX(L+2))}let M=new W,P=new W,T=new W,_=new W;function E(B){T.fromBufferAttribute(s,B),_.copy(T);let N=a[B];M.copy(N),M.sub(T.multiplyScalar(T.dot(N))).normalize(),P.crossVectors(_,N);let k=P.dot(l[B])<0?-1:1;o.setXYZW(B,M.x,M.y,M.z,k)}for(let B=0,N=n.count;B<N;++B)c[B]&&E(B);this._transformed=!0}computeVertexNormals(){let t=this.index,e=this.getAttribute("position");if(e!==void 0){let n=this.getAttribute("normal");if(n===void 0||n.count!==e.count)n=new Hn(new Float32Array(e.count*3),3),this.setAttribute("normal",n);else for(let h=0,p=n.count;h<p;h++)n.setXYZ(h,0,0,0);let s=new W,r=new W,o=new W,a=new W,l=new W,c=new W,f=new W,u=new W;if(t)for(let h=0,p=t.count;h<p;h+=3){let x=t.getX(h+0),w=t.getX(h+1),m=t.getX(h+2);s.fromBufferAttribute(e,x),r.fromBufferAttribute(e,w),o.fromBufferAttribute(e,m),f.subVectors(o,r),u.subVectors(s,r),f.cross(u),a.fromBufferAttribute(n,x),l.fromBufferAttribute(n,w),c.fromBufferAttribute(n,m),a.add(f),l.add(f),c.add(f),n.setXYZ(x,a.x,a.y,a.z),n.setXYZ(w,l.x,l.y,l.z),n.setXYZ(m,c.x,c.y,c.z)}else for(let h=0,p=e.count;h<p;h+=3)s.fromBufferAttribute(e,h+0),r.fromBufferAttribute(e,h+1),o.fromBufferAttribute(e,h+2),f.subVectors(o,r),u.subVectors(s,r),f.cross(u),n.setXYZ(h+0,f.x,f.y,f.z),n.setXYZ(h+1,f.x,f.y,f.z),n.setXYZ(h+2,f.x,f.y,f.z);this.normalizeNormals(),n.needsUpdate=!0}}normalizeNormals(){let t=this.attributes.normal;for(let e=0,n=t.count;e<n;e++)Mn.fromBufferAttribute(t,e),Mn.normalize(),t.setXYZ(e,Mn.x,Mn.y,Mn.z)}toNonIndexed(){function t(a,l){let c=a.array,f=a.itemSize,u=a.normalized,h=new c.constructor(l.length*f),p=0,x=0;for(let w=0,m=l.length;w<m;w++){a.isInterleavedBufferAttribute?p=l[w]*a.data.stride+a.offset:p=l[w]*f;for(let d=0;d<f;d++)h[x++]=c[p++]}return new Hn(h,f,u)}if(this.index===null)return qt("BufferGeometry.toNonIndexed(): BufferGeometry is already non-indexed."),this;let e=new i,n=this.index.array,s=this.attributes;for(let a in s){let l=s[a],c=t(l,n);e.setAttribute(a,c)}let r=this.morphAttributes;for(let a in r){let l=[],c=r[a];for(let f=0,u=c.length;f<u;f++){let h=c[f],p=t(h,n);l.push(p)}e.morphAttributes[a]=l}e.morphTargetsRelative=this.morphTargetsRelative;let o=this.groups;for(let a=0,l=o.length;a<l;a++){let c=o[a];e.addGroup(c.start,c.count,c.materialIndex)}return e}toJSON(){let t={metadata:{version:4.7,type:"BufferGeometry",generator:"BufferGeometry.toJSON"}};if(t.uuid=this.uuid,t.type=this.parameters!==void 0&&this._transformed===!0?"BufferGeometry":this.type,t.name=this.name,Object.keys(this.userData).length>0&&(t.userData=this.userData),this.parameters!==void 0&&this._transformed!==!0){let l=this.parameters;for(let c in l)l[c]!==void 0&&(t[c]=l[c]);return t}t.data={attributes:{}};let e=this.index;e!==null&&(t.data.index={type:e.array.constructor.name,array:Array.prototype.slice.call(e.array)});let n=this.attributes;for(let l in n){let c=n[l];t.data.attributes[l]=c.toJSON(t.data)}let s={},r=!1;for(let l in this.morphAttributes){let c=this.morphAttributes[l],f=[];for(let u=0,h=c.length;u<h;u++){let p=c[u];f.push(p.toJSON(t.data))}f.length>0&&(s[l]=f,r=!0)}r&&(t.data.morphAttributes=s,t.data.morphTargetsRelative=this.morphTargetsRelative);let o=this.groups;o.length>0&&(t.data.groups=JSON.parse(JSON.stringify(o)));let a=this.boundingSphere;return a!==null&&(t.data.boundingSphere=a.toJSON()),t}clone(){return new this.constructor().copy(this)}copy(t){this.index=null,this.attributes={},this.morphAttributes={},this.groups=[],this.boundingBox=null,this.boundingSphere=null;let e={};this.name=t.name;let n=t.index;n!==null&&this.setIndex(n.clone());let s=t.attributes;for(let c in s){let f=s[c];this.setAttribute(c,f.clone(e))}let r=t.morphAttributes;for(let c in r){let f=[],u=r[c];for(let h=0,p=u.length;h<p;h++)f.push(u[h].clone(e));this.morphAttributes[c]=f}this.morphTargetsRelative=t.morphTargetsRelative;let o=t.groups;for(let c=0,f=o.length;c<f;c++){let u=o[c];this.addGroup(u.start,u.count,u.materialIndex)}let a=t.boundingBox;a!==null&&(this.boundingBox=a.clone());let l=t.boundingSphere;return l!==null&&(this.boundingSphere=l.clone()),this.drawRange.start=t.drawRange.start,this.drawRange.count=t.drawRange.count,this.userData=t.userData,this._transformed=t._transformed,this}dispose(){this.dispatchEvent({type:"dispose"})}};var Vh=new W,z_=new W,V_=new Qt,si=class{constructor(t=new W(1,0,0),e=0){this.isPlane=!0,this.normal=t,this.constant=e}set(t,e){return this.normal.copy(t),this.constant=e,this}setComponents(t,e,n,s){return this.normal.set(t,e,n),this.constant=s,this}setFromNormalAndCoplanarPoint(t,e){return this.normal.copy(t),this.constant=-e.dot(this.normal),this}setFromCoplanarPoints(t,e,n){let s=Vh.subVectors(n,e).cross(z_.subVectors(t,e)).normalize();return this.setFromNormalAndCoplanarPoint(s,t),this}copy(t){return this.normal.copy(t.normal),this.constant=t.constant,this}normalize(){let t=1/this.normal.length();return this.normal.multiplyScalar(t),this.constant*=t,this}negate(){return this.constant*=-1,this.normal.negate(),this}distanceToPoint(t){return this.normal.dot(t)+this.constant}distanceToSphere(t){return this.distanceToPoint(t.center)-t.radius}projectPoint(t,e){return e.copy(t).addScaledVector(this.normal,-this.distanceToPoint(t))}intersectLine(t,e,n=!0){let s=t.delta(Vh),r=this.normal.dot(s);if(r===0)return this.distanceToPoint(t.start)===0?e.copy(t.start):null;let o=-(t.start.dot(this.normal)+this.constant)/r;return n===!0&&(o<0||o>1)?null:e.copy(t.start).addScaledVector(s,o)}intersectsLine(t){let e=this.distanceToPoint(t.start),n=this.distanceToPoint(t.end);return e<0&&n>0||n<0&&e>0}intersectsBox(t){return t.intersectsPlane(this)}intersectsSphere(t){return t.intersectsPlane(this)}coplanarPoint(t){return t.copy(this.normal).multiplyScalar(-this.constant)}applyMatrix4(t,e){let n=e||V_.getNormalMatrix(t),s=this.coplanarPoint(Vh).applyMatrix4(t),r=this.normal.applyMatrix3(n).normalize();return this.constant=-s.dot(r),this}translate(t){return this.constant-=t.dot(this.normal),this}equals(t){return t.normal.equals(this.normal)&&t.constant===this.constant}clone(){return new this.constructor().copy(this)}toJSON(){return{normal:this.normal.toArray(),constant:this.constant}}fromJSON(t){return this.normal.fromArray(t.normal),this.constant=t.constant,this}},G_=0,ws=class extends Ti{constructor(){super(),this.isMaterial=!0,Object.defineProperty(this,"id",{value:G_++}),this.uuid=io(),this.name="",this.type="Material",this.blending=to,this.side=Is,this.vertexColors=!1,this.opacity=1,this.transparent=!1,this.alphaHash=!1,this.blendSrc=nu,this.blendDst=iu,this.blendEquation=js,this.blendSrcAlpha=null,this.blendDstAlpha=null,this.blendEquationAlpha=null,this.blendColor=new ae(0,0,0),this.blendAlpha=0,this.depthFunc=zr,this.depthTest=!0,this.depthWrite=!0,this.stencilWriteMask=255,this.stencilFunc=kp,this.stencilRef=0,this.stencilFuncMask=255,this.stencilFail=sl,this.stencilZFail=sl,this.stencilZPass=sl,this.stencilWrite=!1,this.clippingPlanes=null,this.clipIntersection=!1,this.clipShadows=!1,this.shadowSide=null,this.colorWrite=!0,this.precision=null,this.polygonOffset=!1,this.polygonOffsetFactor=0,this.polygonOffsetUnits=0,this.dithering=!1,this.alphaToCoverage=!1,this.premultipliedAlpha=!1,this.forceSinglePass=!1,this.allowOverride=!0,this.visible=!0,this.toneMapped=!0,this.userData={},this.version=0,this._alphaTest=0}get alphaTest(){return this._alphaTest}set alphaTest(t){this._alphaTest>0!=t>0&&this.version++,this._alphaTest=t}onBeforeRender(){}onBeforeCompile(){}customProgramCacheKey(){return this.onBeforeCompile.toString()}setValues(t){if(t!==void 0)for(let e in t){let n=t[e];if(n===void 0){qt(`Material: parameter '${e}' has value of undefined.`);continue}let s=this[e];if(s===void 0){qt(`Material: '${e}' is not a property of THREE.${this.type}.`);continue}s&&s.isColor?s.set(n):s&&s.isVector2&&n&&n.isVector2||s&&s.isEuler&&n&&n.isEuler||s&&s.isVector3&&n&&n.isVector3?s.copy(n):this[e]=n}}toJSON(t){let e=t===void 0||typeof t=="string";e&&(t={textures:{},images:{}});let n={metadata:{version:4.7,type:"Material",generator:"Material.toJSON"}};n.uuid=this.uuid,n.type=this.type,n.blending=this.blending,n.side=this.side,n.shadowSide=this.shadowSide,n.vertexColors=this.vertexColors,n.opacity=this.opacity,n.transparent=this.transparent,n.blendSrc=this.blendSrc,n.blendDst=this.blendDst,n.blendEquation=this.blendEquation,n.blendSrcAlpha=this.blendSrcAlpha,n.blendDstAlpha=this.blendDstAlpha,n.blendEquationAlpha=this.blendEquationAlpha,n.blendColor=this.blendColor.getHex(),n.blendAlpha=this.blendAlpha,n.depthFunc=this.depthFunc,n.depthTest=this.depthTest,n.depthWrite=this.depthWrite,n.colorWrite=this.colorWrite,n.clipIntersection=this.clipIntersection,n.clipShadows=this.clipShadows,n.stencilWriteMask=this.stencilWriteMask,n.stencilFunc=this.stencilFunc,n.stencilRef=this.stencilRef,n.stencilFuncMask=this.stencilFuncMask,n.stencilFail=this.stencilFail,n.stencilZFail=this.stencilZFail,n.stencilZPass=this.stencilZPass,n.stencilWrite=this.stencilWrite,n.polygonOffset=this.polygonOffset,n.polygonOffsetFactor=this.polygonOffsetFactor,n.polygonOffsetUnits=this.polygonOffsetUnits,n.dithering=this.dithering,n.alphaTest=this.alphaTest,n.alphaHash=this.alphaHash,n.alphaToCoverage=this.alphaToCoverage,n.premultipliedAlpha=this.premultipliedAlpha,n.forceSinglePass=this.forceSinglePass,n.allowOverride=this.allowOverride,n.visible=this.visible,n.toneMapped=this.toneMapped,n.name=this.name,this.color&&this.color.isColor&&(n.color=this.color.getHex()),this.roughness!==void 0&&(n.roughness=this.roughness),this.metalness!==void 0&&(n.metalness=this.metalness),this.sheen!==void 0&&(n.sheen=this.sheen),this.sheenColor&&this.sheenColor.isColor&&(n.sheenColor=this.sheenColor.getHex()),this.sheenRoughness!==void 0&&(n.sheenRoughness=this.sheenRoughness),this.emissive&&this.emissive.isColor&&(n.emissive=this.emissive.getHex()),this.emissiveIntensity!==void 0&&(n.emissiveIntensity=this.emissiveIntensity),this.specular&&this.specular.isColor&&(n.specular=this.specular.getHex()),this.specularIntensity!==void 0&&(n.specularIntensity=this.specularIntensity),this.specularColor&&this.specularColor.isColor&&(n.specularColor=this.specularColor.getHex()),this.shininess!==void 0&&(n.shininess=this.shininess),this.clearcoat!==void 0&&(n.clearcoat=this.clearcoat),this.clearcoatRoughness!==void 0&&(n.clearcoatRoughness=this.clearcoatRoughness),this.diffuseRoughness!==void 0&&(n.diffuseRoughness=this.diffuseRoughness),this.diffuseRoughnessMap&&this.diffuseRoughnessMap.isTexture&&(n.diffuseRoughnessMap=this.diffuseRoughnessMap.toJSON(t).uuid),this.clearcoatMap&&this.clearcoatMap.isTexture&&(n.clearcoatMap=this.clearcoatMap.toJSON(t).uuid),this.clearcoatRoughnessMap&&this.clearcoatRoughnessMap.isTexture&&(n.clearcoatRoughnessMap=this.clearcoatRoughnessMap.toJSON(t).uuid),this.clearcoatNormalMap&&this.clearcoatNormalMap.isTexture&&(n.clearcoatNormalMap=this.clearcoatNormalMap.toJSON(t).uuid,n.clearcoatNormalScale=this.clearcoatNormalScale.toArray()),this.sheenColorMap&&this.sheenColorMap.isTexture&&(n.sheenColorMap=this.sheenColorMap.toJSON(t).uuid),this.sheenRoughnessMap&&this.sheenRoughnessMap.isTexture&&(n.sheenRoughnessMap=this.sheenRoughnessMap.toJSON(t).uuid),this.dispersion!==void 0&&(n.dispersion=this.dispersion),this.retroreflectivity!==void 0&&(n.retroreflectivity=this.retroreflectivity),this.iridescence!==void 0&&(n.iridescence=this.iridescence),this.iridescenceIOR!==void 0&&(n.iridescenceIOR=this.iridescenceIOR),this.iridescenceThicknessMinimum!==void 0&&(n.iridescenceThicknessMinimum=this.iridescenceThicknessMinimum),this.iridescenceThicknessMaximum!==void 0&&(n.iridescenceThicknessMaximum=this.iridescenceThicknessMaximum),this.iridescenceMap&&this.iridescenceMap.isTexture&&(n.iridescenceMap=this.iridescenceMap.toJSON(t).uuid),this.iridescenceThicknessMap&&this.iridescenceThicknessMap.isTexture&&(n.iridescenceThicknessMap=this.iridescenceThicknessMap.toJSON(t).uuid),this.anisotropy!==void 0&&(n.anisotropy=this.anisotropy),this.anisotropyRotation!==void 0&&(n.anisotropyRotation=this.anisotropyRotation),this.anisotropyMap&&this.anisotropyMap.isTexture&&(n.anisotropyMap=this.anisotropyMap.toJSON(t).uuid),this.map&&this.map.isTexture&&(n.map=this.map.toJSON(t).uuid),this.matcap&&this.matcap.isTexture&&(n.matcap=this.matcap.toJSON(t).uuid),this.alphaMap&&this.alphaMap.isTexture&&(n.alphaMap=this.alphaMap.toJSON(t).uuid),this.lightMap&&this.lightMap.isTexture&&(n.lightMap=this.lightMap.toJSON(t).uuid,n.lightMapIntensity=this.lightMapIntensity),this.aoMap&&this.aoMap.isTexture&&(n.aoMap=this.aoMap.toJSON(t).uuid,n.aoMapIntensity=this.aoMapIntensity),this.bumpMap&&this.bumpMap.isTexture&&(n.bumpMap=this.bumpMap.toJSON(t).uuid,n.bumpScale=this.bumpScale),this.normalMap&&this.normalMap.isTexture&&(n.normalMap=this.normalMap.toJSON(t).uuid,n.normalMapType=this.normalMapType,n.normalScale=this.normalScale.toArray()),this.displacementMap&&this.displacementMap.isTexture&&(n.displacementMap=this.displacementMap.toJSON(t).uuid,n.displacementScale=this.displacementScale,n.displacementBias=this.displacementBias),this.roughnessMap&&this.roughnessMap.isTexture&&(n.roughnessMap=this.roughnessMap.toJSON(t).uuid),this.metalnessMap&&this.metalnessMap.isTexture&&(n.metalnessMap=this.metalnessMap.toJSON(t).uuid),this.emissiveMap&&this.emissiveMap.isTexture&&(n.emissiveMap=this.emissiveMap.toJSON(t).uuid),this.specularMap&&this.specularMap.isTexture&&(n.specularMap=this.specularMap.toJSON(t).uuid),this.specularIntensityMap&&this.specularIntensityMap.isTexture&&(n.specularIntensityMap=this.specularIntensityMap.toJSON(t).uuid),this.specularColorMap&&this.specularColorMap.isTexture&&(n.specularColorMap=this.specularColorMap.toJSON(t).uuid),this.envMap&&this.envMap.isTexture&&(n.envMap=this.envMap.toJSON(t).uuid,this.combine!==void 0&&(n.combine=this.combine)),this.envMapRotation!==void 0&&(n.envMapRotation=this.envMapRotation.toArray()),this.envMapIntensity!==void 0&&(n.envMapIntensity=this.envMapIntensity),this.reflectivity!==void 0&&(n.reflectivity=this.reflectivity),this.refractionRatio!==void 0&&(n.refractionRatio=this.refractionRatio),this.gradientMap&&this.gradientMap.isTexture&&(n.gradientMap=this.gradientMap.toJSON(t).uuid),this.transmission!==void 0&&(n.transmission=this.transmission),this.transmissionMap&&this.transmissionMap.isTexture&&(n.transmissionMap=this.transmissionMap.toJSON(t).uuid),this.thickness!==void 0&&(n.thickness=this.thickness),this.thicknessMap&&this.thicknessMap.isTexture&&(n.thicknessMap=this.thicknessMap.toJSON(t).uuid),this.attenuationDistance!==void 0&&(n.attenuationDistance=this.attenuationDistance),this.attenuationColor!==void 0&&(n.attenuationColor=this.attenuationColor.getHex()),this.size!==void 0&&(n.size=this.size),this.sizeAttenuation!==void 0&&(n.sizeAttenuation=this.sizeAttenuation),Array.isArray(this.clippingPlanes)&&this.clippingPlanes.length>0&&(n.clippingPlanes=this.clippingPlanes.map(r=>r.toJSON())),this.rotation!==void 0&&(n.rotation=this.rotation),this.depthPacking!==void 0&&(n.depthPacking=this.depthPacking),this.linewidth!==void 0&&(n.linewidth=this.linewidth),this.linecap!==void 0&&(n.linecap=this.linecap),this.linejoin!==void 0&&(n.linejoin=this.linejoin),this.dashSize!==void 0&&(n.dashSize=this.dashSize),this.gapSize!==void 0&&(n.gapSize=this.gapSize),this.scale!==void 0&&(n.scale=this.scale),this.wireframe!==void 0&&(n.wireframe=this.wireframe),this.wireframeLinewidth!==void 0&&(n.wireframeLinewidth=this.wireframeLinewidth),this.wireframeLinecap!==void 0&&(n.wireframeLinecap=this.wireframeLinecap),this.wireframeLinejoin!==void 0&&(n.wireframeLinejoin=this.wireframeLinejoin),this.flatShading!==void 0&&(n.flatShading=this.flatShading),this.fog!==void 0&&(n.fog=this.fog),Object.keys(this.userData).length>0&&(n.userData=this.userData);function s(r){let o=[];for(let a in r){let l=r[a];delete l.metadata,o.push(l)}return o}if(e){let r=s(t.textures),o=s(t.images);r.length>0&&(n.textures=r),o.length>0&&(n.images=o)}return n}fromJSON(t,e){if(t.uuid!==void 0&&(this.uuid=t.uuid),t.name!==void 0&&(this.name=t.name),t.color!==void 0&&this.color!==void 0&&this.color.setHex(t.color),t.roughness!==void 0&&(this.roughness=t.roughness),t.metalness!==void 0&&(this.metalness=t.metalness),t.sheen!==void 0&&(this.sheen=t.sheen),t.sheenColor!==void 0&&(this.sheenColor=new ae().setHex(t.sheenColor)),t.sheenRoughness!==void 0&&(this.sheenRoughness=t.sheenRoughness),t.emissive!==void 0&&this.emissive!==void 0&&this.emissive.setHex(t.emissive),t.specular!==void 0&&this.specular!==void 0&&this.specular.setHex(t.specular),t.specularIntensity!==void 0&&(this.specularIntensity=t.specularIntensity),t.specularColor!==void 0&&this.specularColor!==void 0&&this.specularColor.setHex(t.specularColor),t.shininess!==void 0&&(this.shininess=t.shininess),t.clearcoat!==void 0&&(this.clearcoat=t.clearcoat),t.clearcoatRoughness!==void 0&&(this.clearcoatRoughness=t.clearcoatRoughness),t.diffuseRoughness!==void 0&&(this.diffuseRoughness=t.diffuseRoughness),t.dispersion!==void 0&&(this.dispersion=t.dispersion),t.retroreflectivity!==void 0&&(this.retroreflectivity=t.retroreflectivity),t.iridescence!==void 0&&(this.iridescence=t.iridescence),t.iridescenceIOR!==void 0&&(this.iridescenceIOR=t.iridescenceIOR),t.iridescenceThicknessMinimum!==void 0&&(this.iridescenceThicknessMinimum=t.iridescenceThicknessMinimum),t.iridescenceThicknessMaximum!==void 0&&(this.iridescenceThicknessMaximum=t.iridescenceThicknessMaximum),t.iridescenceThicknessRange!==void 0&&(this.iridescenceThicknessMinimum=t.iridescenceThicknessRange[0],this.iridescenceThicknessMaximum=t.iridescenceThicknessRange[1]),t.transmission!==void 0&&(this.transmission=t.transmission),t.thickness!==void 0&&(this.thickness=t.thickness),t.attenuationDistance!==void 0&&(this.attenuationDistance=t.attenuationDistance),t.attenuationColor!==void 0&&this.attenuationColor!==void 0&&this.attenuationColor.setHex(t.attenuationColor),t.anisotropy!==void 0&&(this.anisotropy=t.anisotropy),t.anisotropyRotation!==void 0&&(this.anisotropyRotation=t.anisotropyRotation),t.fog!==void 0&&(this.fog=t.fog),t.flatShading!==void 0&&(this.flatShading=t.flatShading),t.blending!==void 0&&(this.blending=t.blending),t.combine!==void 0&&(this.combine=t.combine),t.side!==void 0&&(this.side=t.side),t.shadowSide!==void 0&&(this.shadowSide=t.shadowSide),t.opacity!==void 0&&(this.opacity=t.opacity),t.transparent!==void 0&&(this.transparent=t.transparent),t.alphaTest!==void 0&&(this.alphaTest=t.alphaTest),t.alphaHash!==void 0&&(this.alphaHash=t.alphaHash),t.depthFunc!==void 0&&(this.depthFunc=t.depthFunc),t.depthTest!==void 0&&(this.depthTest=t.depthTest),t.depthWrite!==void 0&&(this.depthWrite=t.depthWrite),t.colorWrite!==void 0&&(this.colorWrite=t.colorWrite),t.clippingPlanes!==void 0&&(this.clippingPlanes=t.clippingPlanes.map(n=>new si().fromJSON(n))),t.clipIntersection!==void 0&&(this.clipIntersection=t.clipIntersection),t.clipShadows!==void 0&&(this.clipShadows=t.clipShadows),t.depthPacking!==void 0&&(this.depthPacking=t.depthPacking),t.blendSrc!==void 0&&(this.blendSrc=t.blendSrc),t.blendDst!==void 0&&(this.blendDst=t.blendDst),t.blendEquation!==void 0&&(this.blendEquation=t.blendEquation),t.blendSrcAlpha!==void 0&&(this.blendSrcAlpha=t.blendSrcAlpha),t.blendDstAlpha!==void 0&&(this.blendDstAlpha=t.blendDstAlpha),t.blendEquationAlpha!==void 0&&(this.blendEquationAlpha=t.blendEquationAlpha),t.blendColor!==void 0&&this.blendColor!==void 0&&this.blendColor.setHex(t.blendColor),t.blendAlpha!==void 0&&(this.blendAlpha=t.blendAlpha),t.stencilWriteMask!==void 0&&(this.stencilWriteMask=t.stencilWriteMask),t.stencilFunc!==void 0&&(this.stencilFunc=t.stencilFunc),t.stencilRef!==void 0&&(this.stencilRef=t.stencilRef),t.stencilFuncMask!==void 0&&(this.stencilFuncMask=t.stencilFuncMask),t.stencilFail!==void 0&&(this.stencilFail=t.stencilFail),t.stencilZFail!==void 0&&(this.stencilZFail=t.stencilZFail),t.stencilZPass!==void 0&&(this.stencilZPass=t.stencilZPass),t.stencilWrite!==void 0&&(this.stencilWrite=t.stencilWrite),t.wireframe!==void 0&&(this.wireframe=t.wireframe),t.wireframeLinewidth!==void 0&&(this.wireframeLinewidth=t.wireframeLinewidth),t.wireframeLinecap!==void 0&&(this.wireframeLinecap=t.wireframeLinecap),t.wireframeLinejoin!==void 0&&(this.wireframeLinejoin=t.wireframeLinejoin),t.rotation!==void 0&&(this.rotation=t.rotation),t.linewidth!==void 0&&(this.linewidth=t.linewidth),t.linecap!==void 0&&(this.linecap=t.linecap),t.linejoin!==void 0&&(this.linejoin=t.linejoin),t.dashSize!==void 0&&(this.dashSize=t.dashSize),t.gapSize!==void 0&&(this.gapSize=t.gapSize),t.scale!==void 0&&(this.scale=t.scale),t.polygonOffset!==void 0&&(this.polygonOffset=t.polygonOffset),t.polygonOffsetFactor!==void 0&&(this.polygonOffsetFactor=t.polygonOffsetFactor),t.polygonOffsetUnits!==void 0&&(this.polygonOffsetUnits=t.polygonOffsetUnits),t.dithering!==void 0&&(this.dithering=t.dithering),t.alphaToCoverage!==void 0&&(this.alphaToCoverage=t.alphaToCoverage),t.premultipliedAlpha!==void 0&&(this.premultipliedAlpha=t.premultipliedAlpha),t.forceSinglePass!==void 0&&(this.forceSinglePass=t.forceSinglePass),t.allowOverride!==void 0&&(this.allowOverride=t.allowOverride),t.visible!==void 0&&(this.visible=t.visible),t.toneMapped!==void 0&&(this.toneMapped=t.toneMapped),t.userData!==void 0&&(this.userData=t.userData),t.vertexColors!==void 0&&(typeof t.vertexColors=="number"?this.vertexColors=t.vertexColors>0:this.vertexColors=t.vertexColors),t.size!==void 0&&(this.size=t.size),t.sizeAttenuation!==void 0&&(this.sizeAttenuation=t.sizeAttenuation),t.map!==void 0&&(this.map=e[t.map]||null),t.matcap!==void 0&&(this.matcap=e[t.matcap]||null),t.alphaMap!==void 0&&(this.alphaMap=e[t.alphaMap]||null),t.bumpMap!==void 0&&(this.bumpMap=e[t.bumpMap]||null),t.bumpScale!==void 0&&(this.bumpScale=t.bumpScale),t.normalMap!==void 0&&(this.normalMap=e[t.normalMap]||null),t.normalMapType!==void 0&&(this.normalMapType=t.normalMapType),t.normalScale!==void 0){let n=t.normalScale;Array.isArray(n)===!1&&(n=[n,n]),this.normalScale=new Jt().fromArray(n)}return t.displacementMap!==void 0&&(this.displacementMap=e[t.displacementMap]||null),t.displacementScale!==void 0&&(this.displacementScale=t.displacementScale),t.displacementBias!==void 0&&(this.displacementBias=t.displacementBias),t.roughnessMap!==void 0&&(this.roughnessMap=e[t.roughnessMap]||null),t.metalnessMap!==void 0&&(this.metalnessMap=e[t.metalnessMap]||null),t.emissiveMap!==void 0&&(this.emissiveMap=e[t.emissiveMap]||null),t.emissiveIntensity!==void 0&&(this.emissiveIntensity=t.emissiveIntensity),t.specularMap!==void 0&&(this.specularMap=e[t.specularMap]||null),t.specularIntensityMap!==void 0&&(this.specularIntensityMap=e[t.specularIntensityMap]||null),t.specularColorMap!==void 0&&(this.specularColorMap=e[t.specularColorMap]||null),t.envMap!==void 0&&(this.envMap=e[t.envMap]||null),t.envMapRotation!==void 0&&this.envMapRotation.fromArray(t.envMapRotation),t.envMapIntensity!==void 0&&(this.envMapIntensity=t.envMapIntensity),t.reflectivity!==void 0&&(this.reflectivity=t.reflectivity),t.refractionRatio!==void 0&&(this.refractionRatio=t.refractionRatio),t.lightMap!==void 0&&(this.lightMap=e[t.lightMap]||null),t.lightMapIntensity!==void 0&&(this.lightMapIntensity=t.lightMapIntensity),t.aoMap!==void 0&&(this.aoMap=e[t.aoMap]||null),t.aoMapIntensity!==void 0&&(this.aoMapIntensity=t.aoMapIntensity),t.gradientMap!==void 0&&(this.gradientMap=e[t.gradientMap]||null),t.clearcoatMap!==void 0&&(this.clearcoatMap=e[t.clearcoatMap]||null),t.clearcoatRoughnessMap!==void 0&&(this.clearcoatRoughnessMap=e[t.clearcoatRoughnessMap]||null),t.clearcoatNormalMap!==void 0&&(this.clearcoatNormalMap=e[t.clearcoatNormalMap]||null),t.clearcoatNormalScale!==void 0&&(this.clearcoatNormalScale=new Jt().fromArray(t.clearcoatNormalScale)),t.diffuseRoughnessMap!==void 0&&(this.diffuseRoughnessMap=e[t.diffuseRoughnessMap]||null),t.iridescenceMap!==void 0&&(this.iridescenceMap=e[t.iridescenceMap]||null),t.iridescenceThicknessMap!==void 0&&(this.iridescenceThicknessMap=e[t.iridescenceThicknessMap]||null),t.transmissionMap!==void 0&&(this.transmissionMap=e[t.transmissionMap]||null),t.thicknessMap!==void 0&&(this.thicknessMap=e[t.thicknessMap]||null),t.anisotropyMap!==void 0&&(this.anisotropyMap=e[t.anisotropyMap]||null),t.sheenColorMap!==void 0&&(this.sheenColorMap=e[t.sheenColorMap]||null),t.sheenRoughnessMap!==void 0&&(this.sheenRoughnessMap=e[t.sheenRoughnessMap]||null),this}clone(){return new this.constructor().copy(this)}copy(t){this.name=t.name,this.blending=t.blending,this.side=t.side,this.vertexColors=t.vertexColors,this.opacity=t.opacity,this.transparent=t.transparent,this.blendSrc=t.blendSrc,this.blendDst=t.blendDst,this.blendEquation=t.blendEquation,this.blendSrcAlpha=t.blendSrcAlpha,this.blendDstAlpha=t.blendDstAlpha,this.blendEquationAlpha=t.blendEquationAlpha,this.blendColor.copy(t.blendColor),this.blendAlpha=t.blendAlpha,this.depthFunc=t.depthFunc,this.depthTest=t.depthTest,this.depthWrite=t.depthWrite,this.stencilWriteMask=t.stencilWriteMask,this.stencilFunc=t.stencilFunc,this.stencilRef=t.stencilRef,this.stencilFuncMask=t.stencilFuncMask,this.stencilFail=t.stencilFail,this.stencilZFail=t.stencilZFail,this.stencilZPass=t.stencilZPass,this.stencilWrite=t.stencilWrite;let e=t.clippingPlanes,n=null;if(e!==null){let s=e.length;n=new Array(s);for(let r=0;r!==s;++r)n[r]=e[r].clone()}return this.clippingPlanes=n,this.clipIntersection=t.clipIntersection,this.clipShadows=t.clipShadows,this.shadowSide=t.shadowSide,this.colorWrite=t.colorWrite,this.precision=t.precision,this.polygonOffset=t.polygonOffset,this.polygonOffsetFactor=t.polygonOffsetFactor,this.polygonOffsetUnits=t.polygonOffsetUnits,this.dithering=t.dithering,this.alphaTest=t.alphaTest,this.alphaHash=t.alphaHash,this.alphaToCoverage=t.alphaToCoverage,this.premultipliedAlpha=t.premultipliedAlpha,this.forceSinglePass=t.forceSinglePass,this.allowOverride=t.allowOverride,this.visible=t.visible,this.toneMapped=t.toneMapped,this.userData=JSON.parse(JSON.stringify(t.userData)),this}dispose(){this.dispatchEvent({type:"dispose"})}set needsUpdate(t){t===!0&&this.version++}};var ts=new W,Gh=new W,Ha=new W,Wa=new W,qr=class{constructor(t=new W,e=new W(0,0,-1)){this.origin=t,this.direction=e}set(t,e){return this.origin.copy(t),this.direction.copy(e),this}copy(t){return this.origin.copy(t.origin),this.direction.copy(t.direction),this}at(t,e){return e.copy(this.origin).addScaledVector(this.direction,t)}lookAt(t){return this.direction.copy(t).sub(this.origin).normalize(),this}recast(t){return this.origin.copy(this.at(t,ts)),this}closestPointToPoint(t,e){e.subVectors(t,this.origin);let n=e.dot(this.direction);return n<0?e.copy(this.origin):e.copy(this.origin).addScaledVector(this.direction,n)}distanceToPoint(t){return Math.sqrt(this.distanceSqToPoint(t))}distanceSqToPoint(t){let e=ts.subVectors(t,this.origin).dot(this.direction);return e<0?this.origin.distanceToSquared(t):(ts.copy(this.origin).addScaledVector(this.direction,e),ts.distanceToSquared(t))}distanceSqToSegment(t,e,n,s){Gh.copy(t).add(e).multiplyScalar(.5),Ha.copy(e).sub(t).normalize(),Wa.copy(this.origin).sub(Gh);let r=t.distanceTo(e)*.5,o=-this.direction.dot(Ha),a=Wa.dot(this.direction),l=-Wa.dot(Ha),c=Wa.lengthSq(),f=Math.abs(1-o*o),u,h,p,x;if(f>0)if(u=o*l-a,h=o*a-l,x=r*f,u>=0)if(h>=-x)if(h<=x){let w=1/f;u*=w,h*=w,p=u*(u+o*h+2*a)+h*(o*u+h+2*l)+c}else h=r,u=Math.max(0,-(o*h+a)),p=-u*u+h*(h+2*l)+c;else h=-r,u=Math.max(0,-(o*h+a)),p=-u*u+h*(h+2*l)+c;else h<=-x?(u=Math.max(0,-(-o*r+a)),h=u>0?-r:Math.min(Math.max(-r,-l),r),p=-u*u+h*(h+2*l)+c):h<=x?(u=0,h=Math.min(Math.max(-r,-l),r),p=h*(h+2*l)+c):(u=Math.max(0,-(o*r+a)),h=u>0?r:Math.min(Math.max(-r,-l),r),p=-u*u+h*(h+2*l)+c);else h=o>0?-r:r,u=Math.max(0,-(o*h+a)),p=-u*u+h*(h+2*l)+c;return n&&n.copy(this.origin).addScaledVector(this.direction,u),s&&s.copy(Gh).addScaledVector(Ha,h),p}intersectSphere(t,e){if(t.radius<0)return null;ts.subVectors(t.center,this.origin);let n=ts.dot(this.direction),s=ts.dot(ts)-n*n,r=t.radius*t.radius;if(s>r)return null;let o=Math.sqrt(r-s),a=n-o,l=n+o;return l<0?null:a<0?this.at(l,e):this.at(a,e)}intersectsSphere(t){return t.radius<0?!1:this.distanceSqToPoint(t.center)<=t.radius*t.radius}distanceToPlane(t){let e=t.normal.dot(this.direction);if(e===0)return t.distanceToPoint(this.origin)===0?0:null;let n=-(this.origin.dot(t.normal)+t.constant)/e;return n>=0?n:null}intersectPlane(t,e){let n=this.distanceToPlane(t);return n===null?null:this.at(n,e)}intersectsPlane(t){let e=t.distanceToPoint(this.origin);return e===0||t.normal.dot(this.direction)*e<0}intersectBox(t,e){let n,s,r,o,a,l,c=1/this.direction.x,f=1/this.direction.y,u=1/this.direction.z,h=this.origin;return c>=0?(n=(t.min.x-h.x)*c,s=(t.max.x-h.x)*c):(n=(t.max.x-h.x)*c,s=(t.min.x-h.x)*c),f>=0?(r=(t.min.y-h.y)*f,o=(t.max.y-h.y)*f):(r=(t.max.y-h.y)*f,o=(t.min.y-h.y)*f),n>o||r>s||((r>n||isNaN(n))&&(n=r),(o<s||isNaN(s))&&(s=o),u>=0?(a=(t.min.z-h.z)*u,l=(t.max.z-h.z)*u):(a=(t.max.z-h.z)*u,l=(t.min.z-h.z)*u),n>l||a>s)||((a>n||n!==n)&&(n=a),(l<s||s!==s)&&(s=l),s<0)?null:this.at(n>=0?n:s,e)}intersectsBox(t){return this.intersectBox(t,ts)!==null}intersectTriangle(t,e,n,s,r){let o=this.origin,a=this.direction,l=a.x,c=a.y,f=a.z,u=t.x-o.x,h=t.y-o.y,p=t.z-o.z,x=e.x-o.x,w=e.y-o.y,m=e.z-o.z,d=n.x-o.x,v=n.y-o.y,C=n.z-o.z,M=Math.abs(l),P=Math.abs(c),T=Math.abs(f),_,E,B,N,D,k,G,L,H,Y,V,lt;if(M>=P&&M>=T?(B=l,k=u,H=x,lt=d,l>=0?(_=c,E=f,N=h,D=p,G=w,L=m,Y=v,V=C):(_=f,E=c,N=p,D=h,G=m,L=w,Y=C,V=v)):P>=T?(B=c,k=h,H=w,lt=v,c>=0?(_=f,E=l,N=p,D=u,G=m,L=x,Y=C,V=d):(_=l,E=f,N=u,D=p,G=x,L=m,Y=d,V=C)):(B=f,k=p,H=m,lt=C,f>=0?(_=l,E=c,N=u,D=h,G=x,L=w,Y=d,V=v):(_=c,E=l,N=h,D=u,G=w,L=x,Y=v,V=d)),B===0)return null;let J=_/B,j=E/B,it=1/B,ut=N-J*k,ht=D-j*k,Q=G-J*H,pt=L-j*H,_t=Y-J*lt,Tt=V-j*lt,St=_t*pt-Tt*Q,Gt=ut*Tt-ht*_t,ne=Q*ht-pt*ut;if(s){if(St<0||Gt<0||ne<0)return null}else if((St<0||Gt<0||ne<0)&&(St>0||Gt>0||ne>0))return null;let zt=St+Gt+ne;if(zt===0)return null;let ce=it*(St*k+Gt*H+ne*lt);return(zt>0?ce<0:ce>0)?null:this.at(ce/zt,r)}applyMatrix4(t){return this.origin.applyMatrix4(t),this.direction.transformDirection(t),this}equals(t){return t.origin.equals(this.origin)&&t.direction.equals(this.direction)}clone(){return new this.constructor().copy(this)}},Yr=class extends ws{constructor(t){super(),this.isMeshBasicMaterial=!0,this.type="MeshBasicMaterial",this.color=new ae(16777215),this.map=null,this.lightMap=null,this.lightMapIntensity=1,this.aoMap=null,this.aoMapIntensity=1,this.specularMap=null,this.alphaMap=null,this.envMap=null,this.envMapRotation=new is,this.combine=Nl,this.reflectivity=1,this.refractionRatio=.98,this.wireframe=!1,this.wireframeLinewidth=1,this.wireframeLinecap="round",this.wireframeLinejoin="round",this.fog=!0,this.setValues(t)}copy(t){return super.copy(t),this.color.copy(t.color),this.map=t.map,this.lightMap=t.lightMap,this.lightMapIntensity=t.lightMapIntensity,this.aoMap=t.aoMap,this.aoMapIntensity=t.aoMapIntensity,this.specularMap=t.specularMap,this.alphaMap=t.alphaMap,this.envMap=t.envMap,this.envMapRotation.copy(t.envMapRotation),this.combine=t.combine,this.reflectivity=t.reflectivity,this.refractionRatio=t.refractionRatio,this.wireframe=t.wireframe,this.wireframeLinewidth=t.wireframeLinewidth,this.wireframeLinecap=t.wireframeLinecap,this.wireframeLinejoin=t.wireframeLinejoin,this.fog=t.fog,this}},tp=new Se,Ws=new qr,Xa=new bs,ep=new W,qa=new W,Ya=new W,Za=new W,Hh=new W,$a=new W,np=new W,Ja=new W,In=class extends Pn{constructor(t=new di,e=new Yr){super(),this.isMesh=!0,this.type="Mesh",this.geometry=t,this.material=e,this.morphTargetDictionary=void 0,this.morphTargetInfluences=void 0,this.count=1,this.updateMorphTargets()}copy(t,e){return super.copy(t,e),t.morphTargetInfluences!==void 0?this.morphTargetInfluences=t.morphTargetInfluences.slice():this.morphTargetInfluences=void 0,t.morphTargetDictionary!==void 0?this.morphTargetDictionary=Object.assign({},t.morphTargetDictionary):this.morphTargetDictionary=void 0,this.material=Array.isArray(t.material)?t.material.slice():t.material,this.geometry=t.geometry,this}updateMorphTargets(){let e=this.geometry.morphAttributes,n=Object.keys(e);if(n.length>0){let s=e[n[0]];if(s!==void 0){this.morphTargetInfluences=[],this.morphTargetDictionary={};for(let r=0,o=s.length;r<o;r++){let a=s[r].name||String(r);this.morphTargetInfluences.push(0),this.morphTargetDictionary[a]=r}}}}getVertexPosition(t,e){let n=this.geometry,s=n.attributes.position,r=n.morphAttributes.position,o=n.morphTargetsRelative;e.fromBufferAttribute(s,t);let a=this.morphTargetInfluences;if(r&&a){$a.set(0,0,0);for(let l=0,c=r.length;l<c;l++){let f=a[l],u=r[l];f!==0&&(Hh.fromBufferAttribute(u,t),o?$a.addScaledVector(Hh,f):$a.addScaledVector(Hh.sub(e),f))}e.add($a)}return e}intersectsFrustum(t){return t.intersectsObject(this)}raycast(t,e){let n=this.geometry,s=this.material,r=this.matrixWorld;s!==void 0&&(n.boundingSphere===null&&n.computeBoundingSphere(),Xa.copy(n.boundingSphere),Xa.applyMatrix4(r),Ws.copy(t.ray).recast(t.near),!(Xa.containsPoint(Ws.origin)===!1&&(Ws.intersectSphere(Xa,ep)===null||Ws.origin.distanceToSquared(ep)>(t.far-t.near)**2))&&(tp.copy(r).invert(),Ws.copy(t.ray).applyMatrix4(tp),!(n.boundingBox!==null&&Ws.intersectsBox(n.boundingBox)===!1)&&this._computeIntersections(t,e,Ws)))}_computeIntersections(t,e,n){let s,r=this.geometry,o=this.material,a=r.index,l=r.attributes.position,c=r.attributes.uv,f=r.attributes.uv1,u=r.attributes.normal,h=r.groups,p=r.drawRange;if(a!==null)if(Array.isArray(o))for(let x=0,w=h.length;x<w;x++){let m=h[x],d=o[m.materialIndex],v=Math.max(m.start,p.start),C=Math.min(a.count,Math.min(m.start+m.count,p.start+p.count));for(let M=v,P=C;M<P;M+=3){let T=a.getX(M),_=a.getX(M+1),E=a.getX(M+2);s=Ka(this,d,t,n,c,f,u,T,_,E),s&&(s.faceIndex=Math.floor(M/3),s.face.materialIndex=m.materialIndex,e.push(s))}}else{let x=Math.max(0,p.start),w=Math.min(a.count,p.start+p.count);for(let m=x,d=w;m<d;m+=3){let v=a.getX(m),C=a.getX(m+1),M=a.getX(m+2);s=Ka(this,o,t,n,c,f,u,v,C,M),s&&(s.faceIndex=Math.floor(m/3),e.push(s))}}else if(l!==void 0)if(Array.isArray(o))for(let x=0,w=h.length;x<w;x++){let m=h[x],d=o[m.materialIndex],v=Math.max(m.start,p.start),C=Math.min(l.count,Math.min(m.start+m.count,p.start+p.count));for(let M=v,P=C;M<P;M+=3){let T=M,_=M+1,E=M+2;s=Ka(this,d,t,n,c,f,u,T,_,E),s&&(s.faceIndex=Math.floor(M/3),s.face.materialIndex=m.materialIndex,e.push(s))}}else{let x=Math.max(0,p.start),w=Math.min(l.count,p.start+p.count);for(let m=x,d=w;m<d;m+=3){let v=m,C=m+1,M=m+2;s=Ka(this,o,t,n,c,f,u,v,C,M),s&&(s.faceIndex=Math.floor(m/3),e.push(s))}}}};function H_(i,t,e,n,s,r,o,a){let l;if(t.side===Gn?l=n.intersectTriangle(o,r,s,!0,a):l=n.intersectTriangle(s,r,o,t.side===Is,a),l===null)return null;Ja.copy(a),Ja.applyMatrix4(i.matrixWorld);let c=e.ray.origin.distanceTo(Ja);return c<e.near||c>e.far?null:{distance:c,point:Ja.clone(),object:i}}function Ka(i,t,e,n,s,r,o,a,l,c){i.getVertexPosition(a,qa),i.getVertexPosition(l,Ya),i.getVertexPosition(c,Za);let f=H_(i,t,e,n,qa,Ya,Za,np);if(f){let u=new W;Ms.getBarycoord(np,qa,Ya,Za,u),s&&(f.uv=Ms.getInterpolatedAttribute(s,a,l,c,u,new Jt)),r&&(f.uv1=Ms.getInterpolatedAttribute(r,a,l,c,u,new Jt)),o&&(f.normal=Ms.getInterpolatedAttribute(o,a,l,c,u,new W),f.normal.dot(n.direction)>0&&f.normal.multiplyScalar(-1));let h={a,b:l,c,normal:new W,materialIndex:0};Ms.getNormal(qa,Ya,Za,h.normal),f.face=h,f.barycoord=u}return f}var Go=class extends Wn{constructor(t=null,e=1,n=1,s,r,o,a,l,c=wn,f=wn,u,h){super(null,o,a,l,c,f,s,r,u,h),this.isDataTexture=!0,this.image={data:t,width:e,height:n},this.generateMipmaps=!1,this.flipY=!1,this.unpackAlignment=1}};var Ho=class extends Hn{constructor(t,e,n,s=1){super(t,e,n),this.isInstancedBufferAttribute=!0,this.meshPerAttribute=s}copy(t){return super.copy(t),this.meshPerAttribute=t.meshPerAttribute,this}toJSON(){let t=super.toJSON();return t.meshPerAttribute=this.meshPerAttribute,t.isInstancedBufferAttribute=!0,t}},Ur=new Se,ip=new Se,ja=[],sp=new fi,W_=new Se,Co=new In,Po=new bs,Zr=class extends In{constructor(t,e,n){super(t,e),this.isInstancedMesh=!0,this.instanceMatrix=new Ho(new Float32Array(n*16),16),this.instanceColor=null,this.morphTexture=null,this.count=n,this.boundingBox=null,this.boundingSphere=null;for(let s=0;s<n;s++)this.setMatrixAt(s,W_)}computeBoundingBox(){let t=this.geometry,e=this.count;this.boundingBox===null&&(this.boundingBox=new fi),t.boundingBox===null&&t.computeBoundingBox(),this.boundingBox.makeEmpty();for(let n=0;n<e;n++)this.getMatrixAt(n,Ur),sp.copy(t.boundingBox).applyMatrix4(Ur),this.boundingBox.union(sp)}computeBoundingSphere(){let t=this.geometry,e=this.count;this.boundingSphere===null&&(this.boundingSphere=new bs),t.boundingSphere===null&&t.computeBoundingSphere(),this.boundingSphere.makeEmpty();for(let n=0;n<e;n++)this.getMatrixAt(n,Ur),Po.copy(t.boundingSphere).applyMatrix4(Ur),this.boundingSphere.union(Po)}copy(t,e){return super.copy(t,e),this.instanceMatrix.copy(t.instanceMatrix),this.morphTexture=t.morphTexture!==null?t.morphTexture.clone():null,this.instanceColor=t.instanceColor!==null?t.instanceColor.clone():null,this.count=t.count,this.boundingBox=t.boundingBox!==null?t.boundingBox.clone():null,this.boundingSphere=t.boundingSphere!==null?t.boundingSphere.clone():null,this}getColorAt(t,e){return this.instanceColor===null?e.setRGB(1,1,1):e.fromArray(this.instanceColor.array,t*3)}getMatrixAt(t,e){return e.fromArray(this.instanceMatrix.array,t*16)}getMorphAt(t,e){let n=e.morphTargetInfluences,s=this.morphTexture.source.data.data,r=n.length+1,o=t*r+1;for(let a=0;a<n.length;a++)n[a]=s[o+a]}raycast(t,e){let n=this.matrixWorld,s=this.count;if(Co.geometry=this.geometry,Co.material=this.material,Co.material!==void 0&&(this.boundingSphere===null&&this.computeBoundingSphere(),Po.copy(this.boundingSphere),Po.applyMatrix4(n),t.ray.intersectsSphere(Po)!==!1))for(let r=0;r<s;r++){this.getMatrixAt(r,Ur),ip.multiplyMatrices(n,Ur),Co.matrixWorld=ip,Co.raycast(t,ja);for(let o=0,a=ja.length;o<a;o++){let l=ja[o];l.instanceId=r,l.object=this,e.push(l)}ja.length=0}}setColorAt(t,e){return this.instanceColor===null&&(this.instanceColor=new Ho(new Float32Array(this.instanceMatrix.count*3).fill(1),3)),e.toArray(this.instanceColor.array,t*3),this}setMatrixAt(t,e){return e.toArray(this.instanceMatrix.array,t*16),this}setMorphAt(t,e){let n=e.morphTargetInfluences,s=n.length+1;this.morphTexture===null&&(this.morphTexture=new Go(new Float32Array(s*this.count),s,this.count,Vl,gi));let r=this.morphTexture.source.data.data,o=0;for(let c=0;c<n.length;c++)o+=n[c];let a=this.geometry.morphTargetsRelative?1:1-o,l=s*t;return r[l]=a,r.set(n,l+1),this}updateMorphTargets(){}dispose(){super.dispose(),this.instanceMatrix.dispose(),this.instanceColor!==null&&this.instanceColor.dispose(),this.morphTexture!==null&&(this.morphTexture.dispose(),this.morphTexture=null)}},Xs=new bs,X_=new Jt(.5,.5),Qa=new W,Es=class{constructor(t=new si,e=new si,n=new si,s=new si,r=new si,o=new si){this.planes=[t,e,n,s,r,o]}set(t,e,n,s,r,o){let a=this.planes;return a[0].copy(t),a[1].copy(e),a[2].copy(n),a[3].copy(s),a[4].copy(r),a[5].copy(o),this}copy(t){let e=this.planes;for(let n=0;n<6;n++)e[n].copy(t.planes[n]);return this}setFromProjectionMatrix(t,e=ui,n=!1){let s=this.planes,r=t.elements,o=r[0],a=r[1],l=r[2],c=r[3],f=r[4],u=r[5],h=r[6],p=r[7],x=r[8],w=r[9],m=r[10],d=r[11],v=r[12],C=r[13],M=r[14],P=r[15];if(s[0].setComponents(c-o,p-f,d-x,P-v).normalize(),s[1].setComponents(c+o,p+f,d+x,P+v).normalize(),s[2].setComponents(c+a,p+u,d+w,P+C).normalize(),s[3].setComponents(c-a,p-u,d-w,P-C).normalize(),n)s[4].setComponents(l,h,m,M).normalize(),s[5].setComponents(c-l,p-h,d-m,P-M).normalize();else if(s[4].setComponents(c-l,p-h,d-m,P-M).normalize(),e===ui)s[5].setComponents(c+l,p+h,d+m,P+M).normalize();else if(e===Vr)s[5].setComponents(l,h,m,M).normalize();else throw new Error("THREE.Frustum.setFromProjectionMatrix(): Invalid coordinate system: "+e);return this}intersectsObject(t){if(t.boundingSphere!==void 0)t.boundingSphere===null&&t.computeBoundingSphere(),Xs.copy(t.boundingSphere).applyMatrix4(t.matrixWorld);else{let e=t.geometry;e.boundingSphere===null&&e.computeBoundingSphere(),Xs.copy(e.boundingSphere).applyMatrix4(t.matrixWorld)}return this.intersectsSphere(Xs)}intersectsSprite(t){Xs.center.set(0,0,0);let e=X_.distanceTo(t.center);return Xs.radius=.7071067811865476+e,Xs.applyMatrix4(t.matrixWorld),this.intersectsSphere(Xs)}intersectsSphere(t){let e=this.planes,n=t.center,s=-t.radius;for(let r=0;r<6;r++)if(e[r].distanceToPoint(n)<s)return!1;return!0}intersectsBox(t){let e=this.planes;for(let n=0;n<6;n++){let s=e[n];if(Qa.x=s.normal.x>0?t.max.x:t.min.x,Qa.y=s.normal.y>0?t.max.y:t.min.y,Qa.z=s.normal.z>0?t.max.z:t.min.z,s.distanceToPoint(Qa)<0)return!1}return!0}containsPoint(t){let e=this.planes;for(let n=0;n<6;n++)if(e[n].distanceToPoint(t)<0)return!1;return!0}clone(){return new this.constructor().copy(this)}},rp=new Se,xl=class i{constructor(){this.coordinateSystem=ui,this._frustums=[],this._count=0}setFromArrayCamera(t){let e=t.cameras,n=this._frustums;for(let s=0;s<e.length;s++){let r=e[s];rp.multiplyMatrices(r.projectionMatrix,r.matrixWorldInverse),n[s]===void 0&&(n[s]=new Es),n[s].setFromProjectionMatrix(rp,r.coordinateSystem,r.reversedDepth)}return this._count=e.length,this}getFrustum(t){return this._frustums[t]}intersectsObject(t){let e=this._frustums;for(let n=0;n<this._count;n++)if(e[n].intersectsObject(t))return!0;return!1}intersectsSprite(t){let e=this._frustums;for(let n=0;n<this._count;n++)if(e[n].intersectsSprite(t))return!0;return!1}intersectsSphere(t){let e=this._frustums;for(let n=0;n<this._count;n++)if(e[n].intersectsSphere(t))return!0;return!1}intersectsBox(t){let e=this._frustums;for(let n=0;n<this._count;n++)if(e[n].intersectsBox(t))return!0;return!1}containsPoint(t){let e=this._frustums;for(let n=0;n<this._count;n++)if(e[n].containsPoint(t))return!0;return!1}copy(t){this.coordinateSystem=t.coordinateSystem;let e=this._frustums,n=t._frustums;for(let s=0;s<t._count;s++)e[s]===void 0&&(e[s]=new Es),e[s].copy(n[s]);return this._count=t._count,this}clone(){return new i().copy(this)}};var Wo=class extends Wn{constructor(t=[],e=Qs,n,s,r,o,a,l,c,f){super(t,e,n,s,r,o,a,l,c,f),this.isCubeTexture=!0,this.flipY=!1}get images(){return this.image}set images(t){this.image=t}};var ss=class extends Wn{constructor(t,e,n=Ai,s,r,o,a=wn,l=wn,c,f=ns,u=1){if(f!==ns&&f!==os)throw new Error("THREE.DepthTexture: format must be either THREE.DepthFormat or THREE.DepthStencilFormat");let h={width:t,height:e,depth:u};super(h,s,r,o,a,l,f,n,c),this.isDepthTexture=!0,this.flipY=!1,this.generateMipmaps=!1,this.compareFunction=null}copy(t){return super.copy(t),this.source=new Wr(Object.assign({},t.image)),this.compareFunction=t.compareFunction,this}toJSON(t){let e=super.toJSON(t);return e.compareFunction=this.compareFunction,e}},Xo=class extends ss{constructor(t,e=Ai,n=Qs,s,r,o=wn,a=wn,l,c=ns){let f={width:t,height:t,depth:1},u=[f,f,f,f,f,f];super(t,t,e,n,s,r,o,a,l,c),this.image=u,this.isCubeDepthTexture=!0,this.isCubeTexture=!0}get images(){return this.image}set images(t){this.image=t}},qo=class extends Wn{constructor(t=null){super(),this.sourceTexture=t,this.isExternalTexture=!0}copy(t){return super.copy(t),this.sourceTexture=t.sourceTexture,this}},$r=class i extends di{constructor(t=1,e=1,n=1,s=1,r=1,o=1){super(),this.type="BoxGeometry",this.parameters={width:t,height:e,depth:n,widthSegments:s,heightSegments:r,depthSegments:o};let a=this;s=Math.floor(s),r=Math.floor(r),o=Math.floor(o);let l=[],c=[],f=[],u=[],h=0,p=0;x("z","y","x",-1,-1,n,e,t,o,r,0),x("z","y","x",1,-1,n,e,-t,o,r,1),x("x","z","y",1,1,t,n,e,s,o,2),x("x","z","y",1,-1,t,n,-e,s,o,3),x("x","y","z",1,-1,t,e,n,s,r,4),x("x","y","z",-1,-1,t,e,-n,s,r,5),this.setIndex(l),this.setAttribute("position",new bn(c,3)),this.setAttribute("normal",new bn(f,3)),this.setAttribute("uv",new bn(u,2));function x(w,m,d,v,C,M,P,T,_,E,B){let N=M/_,D=P/E,k=M/2,G=P/2,L=T/2,H=_+1,Y=E+1,V=0,lt=0,J=new W;for(let j=0;j<Y;j++){let it=j*D-G;for(let ut=0;ut<H;ut++){let ht=ut*N-k;J[w]=ht*v,J[m]=it*C,J[d]=L,c.push(J.x,J.y,J.z),J[w]=0,J[m]=0,J[d]=T>0?1:-1,f.push(J.x,J.y,J.z),u.push(ut/_),u.push(1-j/E),V+=1}}for(let j=0;j<E;j++)for(let it=0;it<_;it++){let ut=h+it+H*j,ht=h+it+H*(j+1),Q=h+(it+1)+H*(j+1),pt=h+(it+1)+H*j;l.push(ut,ht,pt),l.push(ht,Q,pt),lt+=6}a.addGroup(p,lt,B),p+=lt,h+=V}}copy(t){return super.copy(t),this.parameters=Object.assign({},t.parameters),this}static fromJSON(t){return new i(t.width,t.height,t.depth,t.widthSegments,t.heightSegments,t.depthSegments)}};var Jr=class i extends di{constructor(t=1,e=1,n=1,s=32,r=1,o=!1,a=0,l=Math.PI*2){super(),this.type="CylinderGeometry",this.parameters={radiusTop:t,radiusBottom:e,height:n,radialSegments:s,heightSegments:r,openEnded:o,thetaStart:a,thetaLength:l};let c=this;s=Math.floor(s),r=Math.floor(r);let f=[],u=[],h=[],p=[],x=0,w=[],m=n/2,d=0;v(),o===!1&&(t>0&&C(!0),e>0&&C(!1)),this.setIndex(f),this.setAttribute("position",new bn(u,3)),this.setAttribute("normal",new bn(h,3)),this.setAttribute("uv",new bn(p,2));function v(){let M=new W,P=new W,T=0,_=(e-t)/n;for(let E=0;E<=r;E++){let B=[],N=E/r,D=N*(e-t)+t;for(let k=0;k<=s;k++){let G=k/s,L=G*l+a,H=Math.sin(L),Y=Math.cos(L);P.x=D*H,P.y=-N*n+m,P.z=D*Y,u.push(P.x,P.y,P.z),M.set(H,_,Y).normalize(),h.push(M.x,M.y,M.z),p.push(G,1-N),B.push(x++)}w.push(B)}for(let E=0;E<s;E++)for(let B=0;B<r;B++){let N=w[B][E],D=w[B+1][E],k=w[B+1][E+1],G=w[B][E+1];(t>0||B!==0)&&(f.push(N,D,G),T+=3),(e>0||B!==r-1)&&(f.push(D,k,G),T+=3)}c.addGroup(d,T,0),d+=T}function C(M){let P=x,T=new Jt,_=new W,E=0,B=M===!0?t:e,N=M===!0?1:-1;for(let k=1;k<=s;k++)u.push(0,m*N,0),h.push(0,N,0),p.push(.5,.5),x++;let D=x;for(let k=0;k<=s;k++){let L=k/s*l+a,H=Math.cos(L),Y=Math.sin(L);_.x=B*Y,_.y=m*N,_.z=B*H,u.push(_.x,_.y,_.z),h.push(0,N,0),T.x=H*.5+.5,T.y=Y*.5*N+.5,p.push(T.x,T.y),x++}for(let k=0;k<s;k++){let G=P+k,L=D+k;M===!0?f.push(L,L+1,G):f.push(L+1,L,G),E+=3}c.addGroup(d,E,M===!0?1:2),d+=E}}copy(t){return super.copy(t),this.parameters=Object.assign({},t.parameters),this}static fromJSON(t){return new i(t.radiusTop,t.radiusBottom,t.height,t.radialSegments,t.heightSegments,t.openEnded,t.thetaStart,t.thetaLength)}};var Zs=class i extends di{constructor(t=1,e=1,n=1,s=1){super(),this.type="PlaneGeometry",this.parameters={width:t,height:e,widthSegments:n,heightSegments:s};let r=t/2,o=e/2,a=Math.floor(n),l=Math.floor(s),c=a+1,f=l+1,u=t/a,h=e/l,p=[],x=[],w=[],m=[];for(let d=0;d<f;d++){let v=d*h-o;for(let C=0;C<c;C++){let M=C*u-r;x.push(M,-v,0),w.push(0,0,1),m.push(C/a),m.push(1-d/l)}}for(let d=0;d<l;d++)for(let v=0;v<a;v++){let C=v+c*d,M=v+c*(d+1),P=v+1+c*(d+1),T=v+1+c*d;p.push(C,M,T),p.push(M,P,T)}this.setIndex(p),this.setAttribute("position",new bn(x,3)),this.setAttribute("normal",new bn(w,3)),this.setAttribute("uv",new bn(m,2))}copy(t){return super.copy(t),this.parameters=Object.assign({},t.parameters),this}static fromJSON(t){return new i(t.width,t.height,t.widthSegments,t.heightSegments)}};var Yo=class i extends di{constructor(t=1,e=32,n=16,s=0,r=Math.PI*2,o=0,a=Math.PI){super(),this.type="SphereGeometry",this.parameters={radius:t,widthSegments:e,heightSegments:n,phiStart:s,phiLength:r,thetaStart:o,thetaLength:a},e=Math.max(3,Math.floor(e)),n=Math.max(2,Math.floor(n));let l=Math.min(o+a,Math.PI),c=0,f=[],u=new W,h=new W,p=[],x=[],w=[],m=[];for(let d=0;d<=n;d++){let v=[],C=d/n,M=o+C*a,P=t*Math.cos(M),T=Math.sqrt(t*t-P*P),_=0;d===0&&o===0?_=.5/e:d===n&&l===Math.PI&&(_=-.5/e);for(let E=0;E<=e;E++){let B=E/e,N=s+B*r;u.x=-T*Math.cos(N),u.y=P,u.z=T*Math.sin(N),x.push(u.x,u.y,u.z),h.copy(u).normalize(),w.push(h.x,h.y,h.z),m.push(B+_,1-C),v.push(c++)}f.push(v)}for(let d=0;d<n;d++)for(let v=0;v<e;v++){let C=f[d][v+1],M=f[d][v],P=f[d+1][v],T=f[d+1][v+1];(d!==0||o>0)&&p.push(C,M,T),(d!==n-1||l<Math.PI)&&p.push(M,P,T)}this.setIndex(p),this.setAttribute("position",new bn(x,3)),this.setAttribute("normal",new bn(w,3)),this.setAttribute("uv",new bn(m,2))}copy(t){return super.copy(t),this.parameters=Object.assign({},t.parameters),this}static fromJSON(t){return new i(t.radius,t.widthSegments,t.heightSegments,t.phiStart,t.phiLength,t.thetaStart,t.thetaLength)}};function er(i){let t={};for(let e in i){t[e]={};for(let n in i[e]){let s=i[e][n];if(op(s))s.isRenderTargetTexture?(qt("UniformsUtils: Textures of render targets cannot be cloned via cloneUniforms() or mergeUniforms()."),t[e][n]=null):t[e][n]=s.clone();else if(Array.isArray(s))if(op(s[0])){let r=[];for(let o=0,a=s.length;o<a;o++)r[o]=s[o].clone();t[e][n]=r}else t[e][n]=s.slice();else t[e][n]=s}}return t}function Ln(i){let t={};for(let e=0;e<i.length;e++){let n=er(i[e]);for(let s in n)t[s]=n[s]}return t}function op(i){return i&&(i.isColor||i.isMatrix3||i.isMatrix4||i.isVector2||i.isVector3||i.isVector4||i.isTexture||i.isQuaternion)}function q_(i){let t=[];for(let e=0;e<i.length;e++)t.push(i[e].clone());return t}function Au(i){let t=i.getRenderTarget();return t===null?i.outputColorSpace:t.isXRRenderTarget===!0?t.texture.colorSpace:ge.workingColorSpace}var Qp={clone:er,merge:Ln},Y_=`void main() {
	gl_Position = projectionMatrix * modelViewMatrix * vec4( position, 1.0 );
}`,Z_=`void main() {
	gl_FragColor = vec4( 1.0, 0.0, 0.0, 1.0 );
}`,pi=class extends ws{constructor(t){super(),this.isShaderMaterial=!0,this.type="ShaderMaterial",this.defines={},this.uniforms={},this.uniformsGroups=[],this.vertexShader=Y_,this.fragmentShader=Z_,this.linewidth=1,this.wireframe=!1,this.wireframeLinewidth=1,this.fog=!1,this.lights=!1,this.clipping=!1,this.forceSinglePass=!0,this.extensions={clipCullDistance:!1,multiDraw:!1},this.defaultAttributeValues={color:[1,1,1],uv:[0,0],uv1:[0,0]},this.index0AttributeName=void 0,this.uniformsNeedUpdate=!1,this.glslVersion=null,t!==void 0&&this.setValues(t)}copy(t){return super.copy(t),this.fragmentShader=t.fragmentShader,this.vertexShader=t.vertexShader,this.uniforms=er(t.uniforms),this.uniformsGroups=q_(t.uniformsGroups),this.defines=Object.assign({},t.defines),this.wireframe=t.wireframe,this.wireframeLinewidth=t.wireframeLinewidth,this.fog=t.fog,this.lights=t.lights,this.clipping=t.clipping,this.extensions=Object.assign({},t.extensions),this.glslVersion=t.glslVersion,this.defaultAttributeValues=Object.assign({},t.defaultAttributeValues),this.index0AttributeName=t.index0AttributeName,this.uniformsNeedUpdate=t.uniformsNeedUpdate,this}toJSON(t){let e=super.toJSON(t);e.glslVersion=this.glslVersion,e.uniforms={};for(let s in this.uniforms){let o=this.uniforms[s].value;o&&o.isTexture?e.uniforms[s]={type:"t",value:o.toJSON(t).uuid}:o&&o.isColor?e.uniforms[s]={type:"c",value:o.getHex()}:o&&o.isVector2?e.uniforms[s]={type:"v2",value:o.toArray()}:o&&o.isVector3?e.uniforms[s]={type:"v3",value:o.toArray()}:o&&o.isVector4?e.uniforms[s]={type:"v4",value:o.toArray()}:o&&o.isMatrix3?e.uniforms[s]={type:"m3",value:o.toArray()}:o&&o.isMatrix4?e.uniforms[s]={type:"m4",value:o.toArray()}:e.uniforms[s]={value:o}}Object.keys(this.defines).length>0&&(e.defines=this.defines),e.vertexShader=this.vertexShader,e.fragmentShader=this.fragmentShader,e.lights=this.lights,e.clipping=this.clipping;let n={};for(let s in this.extensions)this.extensions[s]===!0&&(n[s]=!0);return Object.keys(n).length>0&&(e.extensions=n),e}fromJSON(t,e){if(super.fromJSON(t,e),t.uniforms!==void 0)for(let n in t.uniforms){let s=t.uniforms[n];switch(this.uniforms[n]={},s.type){case"t":this.uniforms[n].value=e[s.value]||null;break;case"c":this.uniforms[n].value=new ae().setHex(s.value);break;case"v2":this.uniforms[n].value=new Jt().fromArray(s.value);break;case"v3":this.uniforms[n].value=new W().fromArray(s.value);break;case"v4":this.uniforms[n].value=new Xe().fromArray(s.value);break;case"m3":this.uniforms[n].value=new Qt().fromArray(s.value);break;case"m4":this.uniforms[n].value=new Se().fromArray(s.value);break;default:this.uniforms[n].value=s.value}}if(t.defines!==void 0&&(this.defines=t.defines),t.vertexShader!==void 0&&(this.vertexShader=t.vertexShader),t.fragmentShader!==void 0&&(this.fragmentShader=t.fragmentShader),t.glslVersion!==void 0&&(this.glslVersion=t.glslVersion),t.extensions!==void 0)for(let n in t.extensions)this.extensions[n]=t.extensions[n];return t.lights!==void 0&&(this.lights=t.lights),t.clipping!==void 0&&(this.clipping=t.clipping),this}},yl=class extends pi{constructor(t){super(t),this.isRawShaderMaterial=!0,this.type="RawShaderMaterial"}};var $s=class extends ws{constructor(t){super(),this.isMeshLambertMaterial=!0,this.type="MeshLambertMaterial",this.color=new ae(16777215),this.map=null,this.lightMap=null,this.lightMapIntensity=1,this.aoMap=null,this.aoMapIntensity=1,this.emissive=new ae(0),this.emissiveIntensity=1,this.emissiveMap=null,this.bumpMap=null,this.bumpScale=1,this.normalMap=null,this.normalMapType=Sc,this.normalScale=new Jt(1,1),this.displacementMap=null,this.displacementScale=1,this.displacementBias=0,this.specularMap=null,this.alphaMap=null,this.envMap=null,this.envMapRotation=new is,this.combine=Nl,this.reflectivity=1,this.envMapIntensity=1,this.refractionRatio=.98,this.wireframe=!1,this.wireframeLinewidth=1,this.wireframeLinecap="round",this.wireframeLinejoin="round",this.flatShading=!1,this.fog=!0,this.setValues(t)}copy(t){return super.copy(t),this.color.copy(t.color),this.map=t.map,this.lightMap=t.lightMap,this.lightMapIntensity=t.lightMapIntensity,this.aoMap=t.aoMap,this.aoMapIntensity=t.aoMapIntensity,this.emissive.copy(t.emissive),this.emissiveMap=t.emissiveMap,this.emissiveIntensity=t.emissiveIntensity,this.bumpMap=t.bumpMap,this.bumpScale=t.bumpScale,this.normalMap=t.normalMap,this.normalMapType=t.normalMapType,this.normalScale.copy(t.normalScale),this.displacementMap=t.displacementMap,this.displacementScale=t.displacementScale,this.displacementBias=t.displacementBias,this.specularMap=t.specularMap,this.alphaMap=t.alphaMap,this.envMap=t.envMap,this.envMapRotation.copy(t.envMapRotation),this.combine=t.combine,this.reflectivity=t.reflectivity,this.envMapIntensity=t.envMapIntensity,this.refractionRatio=t.refractionRatio,this.wireframe=t.wireframe,this.wireframeLinewidth=t.wireframeLinewidth,this.wireframeLinecap=t.wireframeLinecap,this.wireframeLinejoin=t.wireframeLinejoin,this.flatShading=t.flatShading,this.fog=t.fog,this}},vl=class extends ws{constructor(t){super(),this.isMeshDepthMaterial=!0,this.type="MeshDepthMaterial",this.depthPacking=Op,this.map=null,this.alphaMap=null,this.displacementMap=null,this.displacementScale=1,this.displacementBias=0,this.wireframe=!1,this.wireframeLinewidth=1,this.setValues(t)}copy(t){return super.copy(t),this.depthPacking=t.depthPacking,this.map=t.map,this.alphaMap=t.alphaMap,this.displacementMap=t.displacementMap,this.displacementScale=t.displacementScale,this.displacementBias=t.displacementBias,this.wireframe=t.wireframe,this.wireframeLinewidth=t.wireframeLinewidth,this}},Sl=class extends ws{constructor(t){super(),this.isMeshDistanceMaterial=!0,this.type="MeshDistanceMaterial",this.map=null,this.alphaMap=null,this.displacementMap=null,this.displacementScale=1,this.displacementBias=0,this.setValues(t)}copy(t){return super.copy(t),this.map=t.map,this.alphaMap=t.alphaMap,this.displacementMap=t.displacementMap,this.displacementScale=t.displacementScale,this.displacementBias=t.displacementBias,this}};function Fr(i,t){return!i||i.constructor===t?i:typeof t.BYTES_PER_ELEMENT=="number"?new t(i):Array.prototype.slice.call(i)}function tl(i){return i!==void 0&&i.inTangents!==void 0&&i.outTangents!==void 0}var Ts=class{constructor(t,e,n,s){this.parameterPositions=t,this._cachedIndex=0,this.resultBuffer=s!==void 0?s:new e.constructor(n),this.sampleValues=e,this.valueSize=n,this.settings=null,this.DefaultSettings_={}}evaluate(t){let e=this.parameterPositions,n=this._cachedIndex,s=e[n],r=e[n-1];n:{t:{let o;e:{i:if(!(t<s)){for(let a=n+2;;){if(s===void 0){if(t<r)break i;return n=e.length,this._cachedIndex=n,this.copySampleValue_(n-1)}if(n===a)break;if(r=s,s=e[++n],t<s)break t}o=e.length;break e}if(!(t>=r)){let a=e[1];t<a&&(n=2,r=a);for(let l=n-2;;){if(r===void 0)return this._cachedIndex=0,this.copySampleValue_(0);if(n===l)break;if(s=r,r=e[--n-1],t>=r)break t}o=n,n=0;break e}break n}for(;n<o;){let a=n+o>>>1;t<e[a]?o=a:n=a+1}if(s=e[n],r=e[n-1],r===void 0)return this._cachedIndex=0,this.copySampleValue_(0);if(s===void 0)return n=e.length,this._cachedIndex=n,this.copySampleValue_(n-1)}this._cachedIndex=n,this.intervalChanged_(n,r,s)}return this.interpolate_(n,r,t,s)}getSettings_(){return this.settings||this.DefaultSettings_}copySampleValue_(t){let e=this.resultBuffer,n=this.sampleValues,s=this.valueSize,r=t*s;for(let o=0;o!==s;++o)e[o]=n[r+o];return e}interpolate_(){throw new Error("THREE.Interpolant: Call to abstract method.")}intervalChanged_(){}},Ml=class extends Ts{constructor(t,e,n,s){super(t,e,n,s),this._weightPrev=-0,this._offsetPrev=-0,this._weightNext=-0,this._offsetNext=-0,this.DefaultSettings_={endingStart:qh,endingEnd:qh}}intervalChanged_(t,e,n){let s=this.parameterPositions,r=t-2,o=t+1,a=s[r],l=s[o];if(a===void 0)switch(this.getSettings_().endingStart){case Yh:r=t,a=2*e-n;break;case Zh:r=s.length-2,a=e+s[r]-s[r+1];break;default:r=t,a=n}if(l===void 0)switch(this.getSettings_().endingEnd){case Yh:o=t,l=2*n-e;break;case Zh:o=1,l=n+s[1]-s[0];break;default:o=t-1,l=e}let c=(n-e)*.5,f=this.valueSize;this._weightPrev=c/(e-a),this._weightNext=c/(l-n),this._offsetPrev=r*f,this._offsetNext=o*f}interpolate_(t,e,n,s){let r=this.resultBuffer,o=this.sampleValues,a=this.valueSize,l=t*a,c=l-a,f=this._offsetPrev,u=this._offsetNext,h=this._weightPrev,p=this._weightNext,x=(n-e)/(s-e),w=x*x,m=w*x,d=-h*m+2*h*w-h*x,v=(1+h)*m+(-1.5-2*h)*w+(-.5+h)*x+1,C=(-1-p)*m+(1.5+p)*w+.5*x,M=p*m-p*w;for(let P=0;P!==a;++P)r[P]=d*o[f+P]+v*o[c+P]+C*o[l+P]+M*o[u+P];return r}},bl=class extends Ts{constructor(t,e,n,s){super(t,e,n,s)}interpolate_(t,e,n,s){let r=this.resultBuffer,o=this.sampleValues,a=this.valueSize,l=t*a,c=l-a,f=(n-e)/(s-e),u=1-f;for(let h=0;h!==a;++h)r[h]=o[c+h]*u+o[l+h]*f;return r}},wl=class extends Ts{constructor(t,e,n,s){super(t,e,n,s)}interpolate_(t){return this.copySampleValue_(t-1)}},El=class extends Ts{interpolate_(t,e,n,s){let r=this.resultBuffer,o=this.sampleValues,a=this.valueSize,l=t*a,c=l-a,f=this.inTangents,u=this.outTangents;if(!f||!u){let x=(n-e)/(s-e),w=1-x;for(let m=0;m!==a;++m)r[m]=o[c+m]*w+o[l+m]*x;return r}let h=a*2,p=t-1;for(let x=0;x!==a;++x){let w=o[c+x],m=o[l+x],d=p*h+x*2,v=u[d],C=u[d+1],M=t*h+x*2,P=f[M],T=f[M+1],_=J_(n,e,v,P,s);r[x]=tm(_,w,C,T,m)}return r}};function tm(i,t,e,n,s){let r=1-i;return r*r*r*t+3*r*r*i*e+3*r*i*i*n+i*i*i*s}function $_(i,t,e,n,s){let r=1-i;return 3*r*r*(e-t)+6*r*i*(n-e)+3*i*i*(s-n)}function J_(i,t,e,n,s){let r=(i-t)/(s-t);for(let o=0;o<8;o++){let a=tm(r,t,e,n,s)-i;if(Math.abs(a)<1e-10)break;let l=$_(r,t,e,n,s);if(Math.abs(l)<1e-10)break;r=Math.max(0,Math.min(1,r-a/l))}return r}var ri=class{constructor(t,e,n,s){if(t===void 0)throw new Error("THREE.KeyframeTrack: track name is undefined");if(e===void 0||e.length===0)throw new Error("THREE.KeyframeTrack: no keyframes in track named "+t);this.name=t,this.times=Fr(e,this.TimeBufferType),this.values=Fr(n,this.ValueBufferType),this.setInterpolation(s||this.DefaultInterpolation)}static toJSON(t){let e=t.constructor,n;if(e.toJSON!==this.toJSON)n=e.toJSON(t);else{n={name:t.name,times:Fr(t.times,Array),values:Fr(t.values,Array)};let s=t.getInterpolation();s!==t.DefaultInterpolation&&(n.interpolation=s),tl(t.settings)&&(n.settings={inTangents:Fr(t.settings.inTangents,Array),outTangents:Fr(t.settings.outTangents,Array)})}return n.type=t.ValueTypeName,n}InterpolantFactoryMethodDiscrete(t){return new wl(this.times,this.values,this.getValueSize(),t)}InterpolantFactoryMethodLinear(t){return new bl(this.times,this.values,this.getValueSize(),t)}InterpolantFactoryMethodSmooth(t){return new Ml(this.times,this.values,this.getValueSize(),t)}InterpolantFactoryMethodBezier(t){let e=new El(this.times,this.values,this.getValueSize(),t);return this.settings&&(e.inTangents=this.settings.inTangents,e.outTangents=this.settings.outTangents),e}setInterpolation(t){let e;switch(t){case No:e=this.InterpolantFactoryMethodDiscrete;break;case pl:e=this.InterpolantFactoryMethodLinear;break;case il:e=this.InterpolantFactoryMethodSmooth;break;case Xh:e=this.InterpolantFactoryMethodBezier;break}if(e===void 0){let n="unsupported interpolation for "+this.ValueTypeName+" keyframe track named "+this.name;if(this.createInterpolant===void 0)if(t!==this.DefaultInterpolation)this.setInterpolation(this.DefaultInterpolation);else throw new Error(n);return qt("KeyframeTrack:",n),this}return this.createInterpolant=e,this}getInterpolation(){switch(this.createInterpolant){case this.InterpolantFactoryMethodDiscrete:return No;case this.InterpolantFactoryMethodLinear:return pl;case this.InterpolantFactoryMethodSmooth:return il;case this.InterpolantFactoryMethodBezier:return Xh}}getValueSize(){return this.values.length/this.times.length}shift(t){if(t!==0){let e=this.times;for(let n=0,s=e.length;n!==s;++n)e[n]+=t;tl(this.settings)&&(ap(this.settings.inTangents,t),ap(this.settings.outTangents,t))}return this}scale(t){if(t!==1){let e=this.times;for(let n=0,s=e.length;n!==s;++n)e[n]*=t;tl(this.settings)&&(lp(this.settings.inTangents,t),lp(this.settings.outTangents,t))}return this}trim(t,e){let n=this.times,s=n.length,r=0,o=s-1;for(;r!==s&&n[r]<t;)++r;for(;o!==-1&&n[o]>e;)--o;if(++o,r!==0||o!==s){r>=o&&(o=Math.max(o,1),r=o-1);let a=this.getValueSize();this.times=n.slice(r,o),this.values=this.values.slice(r*a,o*a)}return this}validate(){let t=!0,e=this.getValueSize();e-Math.floor(e)!==0&&(jt("KeyframeTrack: Invalid value size in track.",this),t=!1);let n=this.times,s=this.values,r=n.length;r===0&&(jt("KeyframeTrack: Track is empty.",this),t=!1);let o=null;for(let a=0;a!==r;a++){let l=n[a];if(typeof l=="number"&&isNaN(l)){jt("KeyframeTrack: Time is not a valid number.",this,a,l),t=!1;break}if(o!==null&&o>l){jt("KeyframeTrack: Out of order keys.",this,a,l,o),t=!1;break}o=l}if(s!==void 0&&u_(s))for(let a=0,l=s.length;a!==l;++a){let c=s[a];if(isNaN(c)){jt("KeyframeTrack: Value is not a valid number.",this,a,c),t=!1;break}}return t}optimize(){let t=this.times.slice(),e=this.values.slice(),n=this.getValueSize(),s=this.getInterpolation()===il,r=t.length-1,o=1;for(let a=1;a<r;++a){let l=!1,c=t[a],f=t[a+1];if(c!==f&&(a!==1||c!==t[0]))if(s)l=!0;else{let u=a*n,h=u-n,p=u+n;for(let x=0;x!==n;++x){let w=e[u+x];if(w!==e[h+x]||w!==e[p+x]){l=!0;break}}}if(l){if(a!==o){t[o]=t[a];let u=a*n,h=o*n;for(let p=0;p!==n;++p)e[h+p]=e[u+p]}++o}}if(r>0){t[o]=t[r];for(let a=r*n,l=o*n,c=0;c!==n;++c)e[l+c]=e[a+c];++o}return o!==t.length?(this.times=t.slice(0,o),this.values=e.slice(0,o*n)):(this.times=t,this.values=e),this}clone(){let t=this.times.slice(),e=this.values.slice(),n=this.constructor,s=new n(this.name,t,e);return s.createInterpolant=this.createInterpolant,tl(this.settings)&&(s.settings={inTangents:this.settings.inTangents.slice(),outTangents:this.settings.outTangents.slice()}),s}};function ap(i,t){for(let e=0,n=i.length;e!==n;e+=2)i[e]+=t}function lp(i,t){for(let e=0,n=i.length;e!==n;e+=2)i[e]*=t}ri.prototype.ValueTypeName="";ri.prototype.TimeBufferType=Float32Array;ri.prototype.ValueBufferType=Float32Array;ri.prototype.DefaultInterpolation=pl;var As=class extends ri{constructor(t,e,n){super(t,e,n)}};As.prototype.ValueTypeName="bool";As.prototype.ValueBufferType=Array;As.prototype.DefaultInterpolation=No;As.prototype.InterpolantFactoryMethodLinear=void 0;As.prototype.InterpolantFactoryMethodSmooth=void 0;var Tl=class extends ri{constructor(t,e,n,s){super(t,e,n,s)}};Tl.prototype.ValueTypeName="color";var Al=class extends ri{constructor(t,e,n,s){super(t,e,n,s)}};Al.prototype.ValueTypeName="number";var Rl=class extends Ts{constructor(t,e,n,s){super(t,e,n,s)}interpolate_(t,e,n,s){let r=this.resultBuffer,o=this.sampleValues,a=this.valueSize,l=(n-e)/(s-e),c=t*a;for(let f=c+a;c!==f;c+=4)Cn.slerpFlat(r,0,o,c-a,o,c,l);return r}},Zo=class extends ri{constructor(t,e,n,s){super(t,e,n,s)}InterpolantFactoryMethodLinear(t){return new Rl(this.times,this.values,this.getValueSize(),t)}};Zo.prototype.ValueTypeName="quaternion";Zo.prototype.InterpolantFactoryMethodSmooth=void 0;var Rs=class extends ri{constructor(t,e,n){super(t,e,n)}};Rs.prototype.ValueTypeName="string";Rs.prototype.ValueBufferType=Array;Rs.prototype.DefaultInterpolation=No;Rs.prototype.InterpolantFactoryMethodLinear=void 0;Rs.prototype.InterpolantFactoryMethodSmooth=void 0;var Cl=class extends ri{constructor(t,e,n,s){super(t,e,n,s)}};Cl.prototype.ValueTypeName="vector";var Pl=class{constructor(t,e,n){let s=this,r=!1,o=0,a=0,l,c=[];this.onStart=void 0,this.onLoad=t,this.onProgress=e,this.onError=n,this._abortController=null,this.itemStart=function(f){a++,r===!1&&s.onStart!==void 0&&s.onStart(f,o,a),r=!0},this.itemEnd=function(f){o++,s.onProgress!==void 0&&s.onProgress(f,o,a),o===a&&(r=!1,s.onLoad!==void 0&&s.onLoad())},this.itemError=function(f){s.onError!==void 0&&s.onError(f)},this.resolveURL=function(f){return f=f.normalize("NFC"),l?l(f):f},this.setURLModifier=function(f){return l=f,this},this.addHandler=function(f,u){return c.push(f,u),this},this.removeHandler=function(f){let u=c.indexOf(f);return u!==-1&&c.splice(u,2),this},this.getHandler=function(f){for(let u=0,h=c.length;u<h;u+=2){let p=c[u],x=c[u+1];if(p.global&&(p.lastIndex=0),p.test(f))return x}return null},this.abort=function(){return this.abortController.abort(),this._abortController=null,this}}get abortController(){return this._abortController||(this._abortController=new AbortController),this._abortController}},em=new Pl,Il=class{constructor(t){this.manager=t!==void 0?t:em,this.crossOrigin="anonymous",this.withCredentials=!1,this.path="",this.resourcePath="",this.requestHeader={},this.priority="auto",this.cache="default",typeof __THREE_DEVTOOLS__<"u"&&__THREE_DEVTOOLS__.dispatchEvent(new CustomEvent("observe",{detail:this}))}load(){}loadAsync(t,e){let n=this;return new Promise(function(s,r){n.load(t,s,e,r)})}parse(){}setCrossOrigin(t){return this.crossOrigin=t,this}setWithCredentials(t){return this.withCredentials=t,this}setPath(t){return this.path=t,this}setResourcePath(t){return this.resourcePath=t,this}setRequestHeader(t){return this.requestHeader=t,this}setPriority(t){return this.priority=t,this}setCache(t){return this.cache=t,this}abort(){return this}};Il.DEFAULT_MATERIAL_NAME="__DEFAULT";var $o=class extends Pn{static registerNode(t){this.prototype._lightNode=t}constructor(t,e=1){super(),this.isLight=!0,this.type="Light",this.color=new ae(t),this.intensity=e}copy(t,e){return super.copy(t,e),this.color.copy(t.color),this.intensity=t.intensity,this}toJSON(t){let e=super.toJSON(t);return e.object.color=this.color.getHex(),e.object.intensity=this.intensity,e}},Jo=class extends $o{constructor(t,e,n){super(t,n),this.isHemisphereLight=!0,this.type="HemisphereLight",this.position.copy(Pn.DEFAULT_UP),this.updateMatrix(),this.groundColor=new ae(e)}copy(t,e){return super.copy(t,e),this.groundColor.copy(t.groundColor),this}toJSON(t){let e=super.toJSON(t);return e.object.groundColor=this.groundColor.getHex(),e}},Wh=new Se,cp=new W,hp=new W,Ll=class{constructor(t){this.camera=t,this.intensity=1,this.bias=0,this.biasNode=null,this.normalBias=0,this.radius=1,this.blurSamples=8,this.mapSize=new Jt(512,512),this.mapType=Xn,this.map=null,this.mapPass=null,this.matrix=new Se,this.autoUpdate=!0,this.needsUpdate=!1,this._frustum=new Es,this._frameExtents=new Jt(1,1),this._viewportCount=1,this._viewports=[new Xe(0,0,1,1)]}getViewportCount(){return this._viewportCount}getCamera(){return this.camera}getFrustum(){return this._frustum}updateMatrices(t){let e=this.camera;cp.setFromMatrixPosition(t.matrixWorld),e.position.copy(cp),hp.setFromMatrixPosition(t.target.matrixWorld),e.lookAt(hp),e.updateMatrixWorld(),this._updateMatrix(e,this.matrix,this._frustum)}_updateMatrix(t,e,n,s){Wh.multiplyMatrices(t.projectionMatrix,t.matrixWorldInverse),n.setFromProjectionMatrix(Wh,t.coordinateSystem,t.reversedDepth);let r=this._frameExtents,o=s?s.z/r.x:1,a=s?s.w/r.y:1,l=s?s.x/r.x:0,c=s?s.y/r.y:0;t.coordinateSystem===Vr||t.reversedDepth?e.set(.5*o,0,0,.5*o+l,0,.5*a,0,.5*a+c,0,0,1,0,0,0,0,1):e.set(.5*o,0,0,.5*o+l,0,.5*a,0,.5*a+c,0,0,.5,.5,0,0,0,1),e.multiply(Wh)}getViewport(t){return this._viewports[t]}getFrameExtents(){return this._frameExtents}dispose(){this.map&&this.map.dispose(),this.mapPass&&this.mapPass.dispose()}copy(t){return this.camera=t.camera.clone(),this.intensity=t.intensity,this.bias=t.bias,this.radius=t.radius,this.autoUpdate=t.autoUpdate,this.needsUpdate=t.needsUpdate,this.normalBias=t.normalBias,this.blurSamples=t.blurSamples,this.mapSize.copy(t.mapSize),this.mapType=t.mapType,this.biasNode=t.biasNode,this}clone(){return new this.constructor().copy(this)}toJSON(){let t={};return t.intensity=this.intensity,t.bias=this.bias,t.normalBias=this.normalBias,t.radius=this.radius,t.blurSamples=this.blurSamples,t.mapSize=this.mapSize.toArray(),t.mapType=this.mapType,t.camera=this.camera.toJSON(!1).object,delete t.camera.matrix,t}},el=new W,nl=new Cn,Bi=new W,Ko=class extends Pn{constructor(){super(),this.isCamera=!0,this.type="Camera",this.matrixWorldInverse=new Se,this.projectionMatrix=new Se,this.projectionMatrixInverse=new Se,this.coordinateSystem=ui,this._reversedDepth=!1}get reversedDepth(){return this._reversedDepth}copy(t,e){return super.copy(t,e),this.matrixWorldInverse.copy(t.matrixWorldInverse),this.projectionMatrix.copy(t.projectionMatrix),this.projectionMatrixInverse.copy(t.projectionMatrixInverse),this.coordinateSystem=t.coordinateSystem,this}getWorldDirection(t){return super.getWorldDirection(t).negate()}updateMatrixWorld(t){super.updateMatrixWorld(t),this.matrixWorld.decompose(el,nl,Bi),Bi.x===1&&Bi.y===1&&Bi.z===1?this.matrixWorldInverse.copy(this.matrixWorld).invert():this.matrixWorldInverse.compose(el,nl,Bi.set(1,1,1)).invert()}updateWorldMatrix(t,e,n=!1){super.updateWorldMatrix(t,e,n),this.matrixWorld.decompose(el,nl,Bi),Bi.x===1&&Bi.y===1&&Bi.z===1?this.matrixWorldInverse.copy(this.matrixWorld).invert():this.matrixWorldInverse.compose(el,nl,Bi.set(1,1,1)).invert()}clone(){return new this.constructor().copy(this)}},Ss=new W,up=new Jt,fp=new Jt,kn=class extends Ko{constructor(t=50,e=1,n=.1,s=2e3){super(),this.isPerspectiveCamera=!0,this.type="PerspectiveCamera",this.fov=t,this.zoom=1,this.near=n,this.far=s,this.focus=10,this.aspect=e,this.view=null,this.filmGauge=35,this.filmOffset=0,this.updateProjectionMatrix()}copy(t,e){return super.copy(t,e),this.fov=t.fov,this.zoom=t.zoom,this.near=t.near,this.far=t.far,this.focus=t.focus,this.aspect=t.aspect,this.view=t.view===null?null:Object.assign({},t.view),this.filmGauge=t.filmGauge,this.filmOffset=t.filmOffset,this}setFocalLength(t){let e=.5*this.getFilmHeight()/t;this.fov=Hr*2*Math.atan(e),this.updateProjectionMatrix()}getFocalLength(){let t=Math.tan(Lo*.5*this.fov);return .5*this.getFilmHeight()/t}getEffectiveFOV(){return Hr*2*Math.atan(Math.tan(Lo*.5*this.fov)/this.zoom)}getFilmWidth(){return this.filmGauge*Math.min(this.aspect,1)}getFilmHeight(){return this.filmGauge/Math.max(this.aspect,1)}getViewBounds(t,e,n){Ss.set(-1,-1,.5).applyMatrix4(this.projectionMatrixInverse),e.set(Ss.x,Ss.y).multiplyScalar(-t/Ss.z),Ss.set(1,1,.5).applyMatrix4(this.projectionMatrixInverse),n.set(Ss.x,Ss.y).multiplyScalar(-t/Ss.z)}getViewSize(t,e){return this.getViewBounds(t,up,fp),e.subVectors(fp,up)}setViewOffset(t,e,n,s,r,o){this.aspect=t/e,this.view===null&&(this.view={enabled:!0,fullWidth:1,fullHeight:1,offsetX:0,offsetY:0,width:1,height:1}),this.view.enabled=!0,this.view.fullWidth=t,this.view.fullHeight=e,this.view.offsetX=n,this.view.offsetY=s,this.view.width=r,this.view.height=o,this.updateProjectionMatrix()}clearViewOffset(){this.view!==null&&(this.view.enabled=!1),this.updateProjectionMatrix()}updateProjectionMatrix(){let t=this.near,e=t*Math.tan(Lo*.5*this.fov)/this.zoom,n=2*e,s=this.aspect*n,r=-.5*s,o=this.view;if(this.view!==null&&this.view.enabled){let l=o.fullWidth,c=o.fullHeight;r+=o.offsetX*s/l,e-=o.offsetY*n/c,s*=o.width/l,n*=o.height/c}let a=this.filmOffset;a!==0&&(r+=t*a/this.getFilmWidth()),this.projectionMatrix.makePerspective(r,r+s,e,e-n,t,this.far,this.coordinateSystem,this.reversedDepth),this.projectionMatrixInverse.copy(this.projectionMatrix).invert()}toJSON(t){let e=super.toJSON(t);return e.object.fov=this.fov,e.object.zoom=this.zoom,e.object.near=this.near,e.object.far=this.far,e.object.focus=this.focus,e.object.aspect=this.aspect,this.view!==null&&(e.object.view=Object.assign({},this.view)),e.object.filmGauge=this.filmGauge,e.object.filmOffset=this.filmOffset,e}};var Js=class extends Ko{constructor(t=-1,e=1,n=1,s=-1,r=.1,o=2e3){super(),this.isOrthographicCamera=!0,this.type="OrthographicCamera",this.zoom=1,this.view=null,this.left=t,this.right=e,this.top=n,this.bottom=s,this.near=r,this.far=o,this.updateProjectionMatrix()}copy(t,e){return super.copy(t,e),this.left=t.left,this.right=t.right,this.top=t.top,this.bottom=t.bottom,this.near=t.near,this.far=t.far,this.zoom=t.zoom,this.view=t.view===null?null:Object.assign({},t.view),this}setViewOffset(t,e,n,s,r,o){this.view===null&&(this.view={enabled:!0,fullWidth:1,fullHeight:1,offsetX:0,offsetY:0,width:1,height:1}),this.view.enabled=!0,this.view.fullWidth=t,this.view.fullHeight=e,this.view.offsetX=n,this.view.offsetY=s,this.view.width=r,this.view.height=o,this.updateProjectionMatrix()}clearViewOffset(){this.view!==null&&(this.view.enabled=!1),this.updateProjectionMatrix()}updateProjectionMatrix(){let t=(this.right-this.left)/(2*this.zoom),e=(this.top-this.bottom)/(2*this.zoom),n=(this.right+this.left)/2,s=(this.top+this.bottom)/2,r=n-t,o=n+t,a=s+e,l=s-e;if(this.view!==null&&this.view.enabled){let c=(this.right-this.left)/this.view.fullWidth/this.zoom,f=(this.top-this.bottom)/this.view.fullHeight/this.zoom;r+=c*this.view.offsetX,o=r+c*this.view.width,a-=f*this.view.offsetY,l=a-f*this.view.height}this.projectionMatrix.makeOrthographic(r,o,a,l,this.near,this.far,this.coordinateSystem,this.reversedDepth),this.projectionMatrixInverse.copy(this.projectionMatrix).invert()}toJSON(t){let e=super.toJSON(t);return e.object.zoom=this.zoom,e.object.left=this.left,e.object.right=this.right,e.object.top=this.top,e.object.bottom=this.bottom,e.object.near=this.near,e.object.far=this.far,this.view!==null&&(e.object.view=Object.assign({},this.view)),e}},$h=class extends Ll{constructor(){super(new Js(-5,5,5,-5,.5,500)),this.isDirectionalLightShadow=!0}},jo=class extends $o{constructor(t,e){super(t,e),this.isDirectionalLight=!0,this.type="DirectionalLight",this.position.copy(Pn.DEFAULT_UP),this.updateMatrix(),this.target=new Pn,this.shadow=new $h}dispose(){super.dispose(),this.shadow.dispose()}copy(t){return super.copy(t),this.target=t.target.clone(),this.shadow=t.shadow.clone(),this}toJSON(t){let e=super.toJSON(t);return e.object.shadow=this.shadow.toJSON(),e.object.target=this.target.uuid,e}};var Or=-90,Br=1,Kr=class extends Pn{constructor(t,e,n){super(),this.type="CubeCamera",this.renderTarget=n,this.coordinateSystem=null,this.activeMipmapLevel=0;let s=new kn(Or,Br,t,e);s.layers=this.layers,this.add(s);let r=new kn(Or,Br,t,e);r.layers=this.layers,this.add(r);let o=new kn(Or,Br,t,e);o.layers=this.layers,this.add(o);let a=new kn(Or,Br,t,e);a.layers=this.layers,this.add(a);let l=new kn(Or,Br,t,e);l.layers=this.layers,this.add(l);let c=new kn(Or,Br,t,e);c.layers=this.layers,this.add(c)}updateCoordinateSystem(){let t=this.coordinateSystem,e=this.children.concat(),[n,s,r,o,a,l]=e;for(let c of e)this.remove(c);if(t===ui)n.up.set(0,1,0),n.lookAt(1,0,0),s.up.set(0,1,0),s.lookAt(-1,0,0),r.up.set(0,0,-1),r.lookAt(0,1,0),o.up.set(0,0,1),o.lookAt(0,-1,0),a.up.set(0,1,0),a.lookAt(0,0,1),l.up.set(0,1,0),l.lookAt(0,0,-1);else if(t===Vr)n.up.set(0,-1,0),n.lookAt(-1,0,0),s.up.set(0,-1,0),s.lookAt(1,0,0),r.up.set(0,0,1),r.lookAt(0,1,0),o.up.set(0,0,-1),o.lookAt(0,-1,0),a.up.set(0,-1,0),a.lookAt(0,0,1),l.up.set(0,-1,0),l.lookAt(0,0,-1);else throw new Error("THREE.CubeCamera.updateCoordinateSystem(): Invalid coordinate system: "+t);for(let c of e)this.add(c),c.updateMatrixWorld()}update(t,e){this.parent===null&&this.updateMatrixWorld();let{renderTarget:n,activeMipmapLevel:s}=this;this.coordinateSystem!==t.coordinateSystem&&(this.coordinateSystem=t.coordinateSystem,this.updateCoordinateSystem());let[r,o,a,l,c,f]=this.children,u=t.getRenderTarget(),h=t.getActiveCubeFace(),p=t.getActiveMipmapLevel(),x=t.xr.enabled;t.xr.enabled=!1;let w=n.texture.mipmapsAutoUpdate;n.texture.mipmapsAutoUpdate=!1;let m=!1;t.isWebGLRenderer===!0?m=t.state.buffers.depth.getReversed():m=t.reversedDepthBuffer,t.setRenderTarget(n,0,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,r),t.setRenderTarget(n,1,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,o),t.setRenderTarget(n,2,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,a),t.setRenderTarget(n,3,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,l),t.setRenderTarget(n,4,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,c),n.texture.mipmapsAutoUpdate=w,t.setRenderTarget(n,5,s),m&&t.autoClear===!1&&t.clearDepth(),t.render(e,f),t.setRenderTarget(u,h,p),t.xr.enabled=x,n.texture.needsPMREMUpdate=!0}},Dl=class extends kn{constructor(t=[]){super(),this.isArrayCamera=!0,this.isMultiViewCamera=!1,this.cameras=t,this.perCameraFrustumCulled=!1}};var Ru="\\[\\]\\.:\\/",K_=new RegExp("["+Ru+"]","g"),Cu="[^"+Ru+"]",j_="[^"+Ru.replace("\\.","")+"]",Q_=/((?:WC+[\/:])*)/.source.replace("WC",Cu),tx=/(WCOD+)?/.source.replace("WCOD",j_),ex=/(?:\.(WC+)(?:\[(.+)\])?)?/.source.replace("WC",Cu),nx=/\.(WC+)(?:\[(.+)\])?/.source.replace("WC",Cu),ix=new RegExp("^"+Q_+tx+ex+nx+"$"),sx=["material","materials","bones","map"],Jh=class{constructor(t,e,n){let s=n||Ge.parseTrackName(e);this._targetGroup=t,this._bindings=t.subscribe_(e,s)}getValue(t,e){this.bind();let n=this._targetGroup.nCachedObjects_,s=this._bindings[n];s!==void 0&&s.getValue(t,e)}setValue(t,e){let n=this._bindings;for(let s=this._targetGroup.nCachedObjects_,r=n.length;s!==r;++s)n[s].setValue(t,e)}bind(){let t=this._bindings;for(let e=this._targetGroup.nCachedObjects_,n=t.length;e!==n;++e)t[e].bind()}unbind(){let t=this._bindings;for(let e=this._targetGroup.nCachedObjects_,n=t.length;e!==n;++e)t[e].unbind()}},Ge=class i{constructor(t,e,n){this.path=e,this.parsedPath=n||i.parseTrackName(e),this.node=i.findNode(t,this.parsedPath.nodeName),this.rootNode=t,this.getValue=this._getValue_unbound,this.setValue=this._setValue_unbound}static create(t,e,n){return t&&t.isAnimationObjectGroup?new i.Composite(t,e,n):new i(t,e,n)}static sanitizeNodeName(t){return t.replace(/\s/g,"_").replace(K_,"")}static parseTrackName(t){let e=ix.exec(t);if(e===null)throw new Error("THREE.PropertyBinding: Cannot parse trackName: "+t);let n={nodeName:e[2],objectName:e[3],objectIndex:e[4],propertyName:e[5],propertyIndex:e[6]},s=n.nodeName&&n.nodeName.lastIndexOf(".");if(s!==void 0&&s!==-1){let r=n.nodeName.substring(s+1);sx.indexOf(r)!==-1&&(n.nodeName=n.nodeName.substring(0,s),n.objectName=r)}if(n.propertyName===null||n.propertyName.length===0)throw new Error("THREE.PropertyBinding: can not parse propertyName from trackName: "+t);return n}static findNode(t,e){if(e===void 0||e===""||e==="."||e===-1||e===t.name||e===t.uuid)return t;if(t.skeleton){let n=t.skeleton.getBoneByName(e);if(n!==void 0)return n}if(t.children){let n=function(r){for(let o=0;o<r.length;o++){let a=r[o];if(a.name===e||a.uuid===e)return a;let l=n(a.children);if(l)return l}return null},s=n(t.children);if(s)return s}return null}_getValue_unavailable(){}_setValue_unavailable(){}_getValue_direct(t,e){t[e]=this.targetObject[this.propertyName]}_getValue_array(t,e){let n=this.resolvedProperty;for(let s=0,r=n.length;s!==r;++s)t[e++]=n[s]}_getValue_arrayElement(t,e){t[e]=this.resolvedProperty[this.propertyIndex]}_getValue_toArray(t,e){this.resolvedProperty.toArray(t,e)}_setValue_direct(t,e){this.targetObject[this.propertyName]=t[e]}_setValue_direct_setNeedsUpdate(t,e){this.targetObject[this.propertyName]=t[e],this.targetObject.needsUpdate=!0}_setValue_direct_setMatrixWorldNeedsUpdate(t,e){this.targetObject[this.propertyName]=t[e],this.targetObject.matrixWorldNeedsUpdate=!0}_setValue_array(t,e){let n=this.resolvedProperty;for(let s=0,r=n.length;s!==r;++s)n[s]=t[e++]}_setValue_array_setNeedsUpdate(t,e){let n=this.resolvedProperty;for(let s=0,r=n.length;s!==r;++s)n[s]=t[e++];this.targetObject.needsUpdate=!0}_setValue_array_setMatrixWorldNeedsUpdate(t,e){let n=this.resolvedProperty;for(let s=0,r=n.length;s!==r;++s)n[s]=t[e++];this.targetObject.matrixWorldNeedsUpdate=!0}_setValue_arrayElement(t,e){this.resolvedProperty[this.propertyIndex]=t[e]}_setValue_arrayElement_setNeedsUpdate(t,e){this.resolvedProperty[this.propertyIndex]=t[e],this.targetObject.needsUpdate=!0}_setValue_arrayElement_setMatrixWorldNeedsUpdate(t,e){this.resolvedProperty[this.propertyIndex]=t[e],this.targetObject.matrixWorldNeedsUpdate=!0}_setValue_fromArray(t,e){this.resolvedProperty.fromArray(t,e)}_setValue_fromArray_setNeedsUpdate(t,e){this.resolvedProperty.fromArray(t,e),this.targetObject.needsUpdate=!0}_setValue_fromArray_setMatrixWorldNeedsUpdate(t,e){this.resolvedProperty.fromArray(t,e),this.targetObject.matrixWorldNeedsUpdate=!0}_getValue_unbound(t,e){this.bind(),this.getValue(t,e)}_setValue_unbound(t,e){this.bind(),this.setValue(t,e)}bind(){let t=this.node,e=this.parsedPath,n=e.objectName,s=e.propertyName,r=e.propertyIndex;if(t||(t=i.findNode(this.rootNode,e.nodeName),this.node=t),this.getValue=this._getValue_unavailable,this.setValue=this._setValue_unavailable,!t){qt("PropertyBinding: No target node found for track: "+this.path+".");return}if(n){let c=e.objectIndex;switch(n){case"materials":if(!t.material){jt("PropertyBinding: Can not bind to material as node does not have a material.",this);return}if(!t.material.materials){jt("PropertyBinding: Can not bind to material.materials as node.material does not have a materials array.",this);return}t=t.material.materials;break;case"bones":if(!t.skeleton){jt("PropertyBinding: Can not bind to bones as node does not have a skeleton.",this);return}t=t.skeleton.bones;for(let f=0;f<t.length;f++)if(t[f].name===c){c=f;break}break;case"map":if("map"in t){t=t.map;break}if(!t.material){jt("PropertyBinding: Can not bind to material as node does not have a material.",this);return}if(!t.material.map){jt("PropertyBinding: Can not bind to material.map as node.material does not have a map.",this);return}t=t.material.map;break;default:if(t[n]===void 0){jt("PropertyBinding: Can not bind to objectName of node undefined.",this);return}t=t[n]}if(c!==void 0){if(t[c]===void 0){jt("PropertyBinding: Trying to bind to objectIndex of objectName, but is undefined.",this,t);return}t=t[c]}}let o=t[s];if(o===void 0){let c=e.nodeName;jt("PropertyBinding: Trying to update property for track: "+c+"."+s+" but it wasn't found.",t);return}let a=this.Versioning.None;this.targetObject=t,t.isMaterial===!0?a=this.Versioning.NeedsUpdate:t.isObject3D===!0&&(a=this.Versioning.MatrixWorldNeedsUpdate);let l=this.BindingType.Direct;if(r!==void 0){if(s==="morphTargetInfluences"){if(!t.geometry){jt("PropertyBinding: Can not bind to morphTargetInfluences because node does not have a geometry.",this);return}if(!t.geometry.morphAttributes){jt("PropertyBinding: Can not bind to morphTargetInfluences because node does not have a geometry.morphAttributes.",this);return}t.morphTargetDictionary[r]!==void 0&&(r=t.morphTargetDictionary[r])}l=this.BindingType.ArrayElement,this.resolvedProperty=o,this.propertyIndex=r}else o.fromArray!==void 0&&o.toArray!==void 0?(l=this.BindingType.HasFromToArray,this.resolvedProperty=o):Array.isArray(o)?(l=this.BindingType.EntireArray,this.resolvedProperty=o):this.propertyName=s;this.getValue=this.GetterByBindingType[l],this.setValue=this.SetterByBindingTypeAndVersioning[l][a]}unbind(){this.node=null,this.getValue=this._getValue_unbound,this.setValue=this._setValue_unbound}};Ge.Composite=Jh;Ge.prototype.BindingType={Direct:0,EntireArray:1,ArrayElement:2,HasFromToArray:3};Ge.prototype.Versioning={None:0,NeedsUpdate:1,MatrixWorldNeedsUpdate:2};Ge.prototype.GetterByBindingType=[Ge.prototype._getValue_direct,Ge.prototype._getValue_array,Ge.prototype._getValue_arrayElement,Ge.prototype._getValue_toArray];Ge.prototype.SetterByBindingTypeAndVersioning=[[Ge.prototype._setValue_direct,Ge.prototype._setValue_direct_setNeedsUpdate,Ge.prototype._setValue_direct_setMatrixWorldNeedsUpdate],[Ge.prototype._setValue_array,Ge.prototype._setValue_array_setNeedsUpdate,Ge.prototype._setValue_array_setMatrixWorldNeedsUpdate],[Ge.prototype._setValue_arrayElement,Ge.prototype._setValue_arrayElement_setNeedsUpdate,Ge.prototype._setValue_arrayElement_setMatrixWorldNeedsUpdate],[Ge.prototype._setValue_fromArray,Ge.prototype._setValue_fromArray_setNeedsUpdate,Ge.prototype._setValue_fromArray_setMatrixWorldNeedsUpdate]];var Vb=new Float32Array(1);var jr=class{constructor(t=1,e=0,n=0){this.radius=t,this.phi=e,this.theta=n}set(t,e,n){return this.radius=t,this.phi=e,this.theta=n,this}copy(t){return this.radius=t.radius,this.phi=t.phi,this.theta=t.theta,this}makeSafe(){return this.phi=fe(this.phi,1e-6,Math.PI-1e-6),this}setFromVector3(t){return this.setFromCartesianCoords(t.x,t.y,t.z)}setFromCartesianCoords(t,e,n){return this.radius=Math.sqrt(t*t+e*e+n*n),this.radius===0?(this.theta=0,this.phi=0):(this.theta=Math.atan2(t,n),this.phi=Math.acos(fe(e/this.radius,-1,1))),this}clone(){return new this.constructor().copy(this)}};var Kh=class{static{this.prototype.isMatrix2=!0}constructor(t,e,n,s){this.elements=[1,0,0,1],t!==void 0&&this.set(t,e,n,s)}identity(){return this.set(1,0,0,1),this}fromArray(t,e=0){for(let n=0;n<4;n++)this.elements[n]=t[n+e];return this}set(t,e,n,s){let r=this.elements;return r[0]=t,r[2]=e,r[1]=n,r[3]=s,this}};var Qo=class extends Ti{constructor(t,e=null){super(),this.object=t,this.domElement=e,this.enabled=!0,this.state=-1,this.keys={},this.mouseButtons={LEFT:null,MIDDLE:null,RIGHT:null},this.touches={ONE:null,TWO:null}}connect(t){this.domElement!==null&&this.disconnect(),this.domElement=t}disconnect(){}dispose(){}update(){}};function Pu(i,t,e,n){let s=rx(n);switch(e){case gu:return i*t;case Vl:return i*t/s.components*s.byteLength;case Gl:return i*t/s.components*s.byteLength;case Ls:return i*t*2/s.components*s.byteLength;case Hl:return i*t*2/s.components*s.byteLength;case _u:return i*t*3/s.components*s.byteLength;case Ci:return i*t*4/s.components*s.byteLength;case Wl:return i*t*4/s.components*s.byteLength;case na:case ia:return Math.floor((i+3)/4)*Math.floor((t+3)/4)*8;case sa:case ra:return Math.floor((i+3)/4)*Math.floor((t+3)/4)*16;case ql:case Zl:return Math.max(i,16)*Math.max(t,8)/4;case Xl:case Yl:return Math.max(i,8)*Math.max(t,8)/2;case $l:case Jl:case jl:case Ql:return Math.floor((i+3)/4)*Math.floor((t+3)/4)*8;case Kl:case oa:case tc:return Math.floor((i+3)/4)*Math.floor((t+3)/4)*16;case ec:return Math.floor((i+3)/4)*Math.floor((t+3)/4)*16;case nc:return Math.floor((i+4)/5)*Math.floor((t+3)/4)*16;case ic:return Math.floor((i+4)/5)*Math.floor((t+4)/5)*16;case sc:return Math.floor((i+5)/6)*Math.floor((t+4)/5)*16;case rc:return Math.floor((i+5)/6)*Math.floor((t+5)/6)*16;case oc:return Math.floor((i+7)/8)*Math.floor((t+4)/5)*16;case ac:return Math.floor((i+7)/8)*Math.floor((t+5)/6)*16;case lc:return Math.floor((i+7)/8)*Math.floor((t+7)/8)*16;case cc:return Math.floor((i+9)/10)*Math.floor((t+4)/5)*16;case hc:return Math.floor((i+9)/10)*Math.floor((t+5)/6)*16;case uc:return Math.floor((i+9)/10)*Math.floor((t+7)/8)*16;case fc:return Math.floor((i+9)/10)*Math.floor((t+9)/10)*16;case dc:return Math.floor((i+11)/12)*Math.floor((t+9)/10)*16;case pc:return Math.floor((i+11)/12)*Math.floor((t+11)/12)*16;case mc:case gc:case _c:return Math.ceil(i/4)*Math.ceil(t/4)*16;case xc:case yc:return Math.ceil(i/4)*Math.ceil(t/4)*8;case aa:case vc:return Math.ceil(i/4)*Math.ceil(t/4)*16}throw new Error(`Unable to determine texture byte length for ${e} format.`)}function rx(i){switch(i){case Xn:case fu:return{byteLength:1,components:1};case no:case du:case Ri:return{byteLength:2,components:1};case kl:case zl:return{byteLength:2,components:4};case Ai:case Bl:case gi:return{byteLength:4,components:1};case pu:case mu:return{byteLength:4,components:3}}throw new Error(`THREE.TextureUtils: Unknown texture type ${i}.`)}typeof __THREE_DEVTOOLS__<"u"&&__THREE_DEVTOOLS__.dispatchEvent(new CustomEvent("register",{detail:{revision:"187"}}));typeof window<"u"&&(window.__THREE__?qt("WARNING: Multiple instances of Three.js being imported."):window.__THREE__="187");function bm(){let i=null,t=!1,e=null,n=null;function s(r,o){n=i.requestAnimationFrame(s),e(r,o)}return{start:function(){t!==!0&&e!==null&&i!==null&&(n=i.requestAnimationFrame(s),t=!0)},stop:function(){i!==null&&i.cancelAnimationFrame(n),t=!1},setAnimationLoop:function(r){e=r},setContext:function(r){i=r}}}function ax(i){let t=new WeakMap;function e(a,l){let c=a.array,f=a.usage,u=c.byteLength,h=i.createBuffer();i.bindBuffer(l,h),i.bufferData(l,c,f),a.onUploadCallback();let p;if(c instanceof Float32Array)p=i.FLOAT;else if(typeof Float16Array<"u"&&c instanceof Float16Array)p=i.HALF_FLOAT;else if(c instanceof Uint16Array)a.isFloat16BufferAttribute?p=i.HALF_FLOAT:p=i.UNSIGNED_SHORT;else if(c instanceof Int16Array)p=i.SHORT;else if(c instanceof Uint32Array)p=i.UNSIGNED_INT;else if(c instanceof Int32Array)p=i.INT;else if(c instanceof Int8Array)p=i.BYTE;else if(c instanceof Uint8Array)p=i.UNSIGNED_BYTE;else if(c instanceof Uint8ClampedArray)p=i.UNSIGNED_BYTE;else throw new Error("THREE.WebGLAttributes: Unsupported buffer data format: "+c);return{buffer:h,type:p,bytesPerElement:c.BYTES_PER_ELEMENT,version:a.version,size:u}}function n(a,l,c){let f=l.array,u=l.updateRanges;if(i.bindBuffer(c,a),u.length===0)i.bufferSubData(c,0,f);else{u.sort((p,x)=>p.start-x.start);let h=0;for(let p=1;p<u.length;p++){let x=u[h],w=u[p];w.start<=x.start+x.count+1?x.count=Math.max(x.count,w.start+w.count-x.start):(++h,u[h]=w)}u.length=h+1;for(let p=0,x=u.length;p<x;p++){let w=u[p];i.bufferSubData(c,w.start*f.BYTES_PER_ELEMENT,f,w.start,w.count)}l.clearUpdateRanges()}l.onUploadCallback()}function s(a){return a.isInterleavedBufferAttribute&&(a=a.data),t.get(a)}function r(a){a.isInterleavedBufferAttribute&&(a=a.data);let l=t.get(a);l&&(i.deleteBuffer(l.buffer),t.delete(a))}function o(a,l){if(a.isInterleavedBufferAttribute&&(a=a.data),a.isGLBufferAttribute){let f=t.get(a);(!f||f.version<a.version)&&t.set(a,{buffer:a.buffer,type:a.type,bytesPerElement:a.elementSize,version:a.version});return}let c=t.get(a);if(c===void 0)t.set(a,e(a,l));else if(c.version<a.version){if(c.size!==a.array.byteLength)throw new Error("THREE.WebGLAttributes: The size of the buffer attribute's array buffer does not match the original size. Resizing buffer attributes is not supported.");n(c.buffer,a,l),c.version=a.version}}return{get:s,remove:r,update:o}}var lx=`#ifdef USE_ALPHAHASH
	if ( diffuseColor.a < getAlphaHashThreshold( vPosition ) ) discard;
#endif`,cx=`#ifdef USE_ALPHAHASH
	const float ALPHA_HASH_SCALE = 0.05;
	float hash2D( vec2 value ) {
		return fract( 1.0e4 * sin( 17.0 * value.x + 0.1 * value.y ) * ( 0.1 + abs( sin( 13.0 * value.y + value.x ) ) ) );
	}
	float hash3D( vec3 value ) {
		return hash2D( vec2( hash2D( value.xy ), value.z ) );
	}
	float getAlphaHashThreshold( vec3 position ) {
		float maxDeriv = max(
			length( dFdx( position.xyz ) ),
			length( dFdy( position.xyz ) )
		);
		float pixScale = 1.0 / ( ALPHA_HASH_SCALE * maxDeriv );
		vec2 pixScales = vec2(
			exp2( floor( log2( pixScale ) ) ),
			exp2( ceil( log2( pixScale ) ) )
		);
		vec2 alpha = vec2(
			hash3D( floor( pixScales.x * position.xyz ) ),
			hash3D( floor( pixScales.y * position.xyz ) )
		);
		float lerpFactor = fract( log2( pixScale ) );
		float x = ( 1.0 - lerpFactor ) * alpha.x + lerpFactor * alpha.y;
		float a = min( lerpFactor, 1.0 - lerpFactor );
		vec3 cases = vec3(
			x * x / ( 2.0 * a * ( 1.0 - a ) ),
			( x - 0.5 * a ) / ( 1.0 - a ),
			1.0 - ( ( 1.0 - x ) * ( 1.0 - x ) / ( 2.0 * a * ( 1.0 - a ) ) )
		);
		float threshold = ( x < ( 1.0 - a ) )
			? ( ( x < a ) ? cases.x : cases.y )
			: cases.z;
		return clamp( threshold , 1.0e-6, 1.0 );
	}
#endif`,hx=`#ifdef USE_ALPHAMAP
	diffuseColor.a *= texture2D( alphaMap, vAlphaMapUv ).g;
#endif`,ux=`#ifdef USE_ALPHAMAP
	uniform sampler2D alphaMap;
#endif`,fx=`#ifdef USE_ALPHATEST
	#ifdef ALPHA_TO_COVERAGE
	diffuseColor.a = smoothstep( alphaTest, alphaTest + fwidth( diffuseColor.a ), diffuseColor.a );
	if ( diffuseColor.a == 0.0 ) discard;
	#else
	if ( diffuseColor.a < alphaTest ) discard;
	#endif
#endif`,dx=`#ifdef USE_ALPHATEST
	uniform float alphaTest;
#endif`,px=`#ifdef USE_AOMAP
	float ambientOcclusion = ( texture2D( aoMap, vAoMapUv ).r - 1.0 ) * aoMapIntensity + 1.0;
	reflectedLight.indirectDiffuse *= ambientOcclusion;
	#if defined( USE_CLEARCOAT ) 
		clearcoatSpecularIndirect *= ambientOcclusion;
	#endif
	#if defined( USE_SHEEN ) 
		sheenSpecularIndirect *= ambientOcclusion;
	#endif
	#if defined( USE_ENVMAP ) && defined( STANDARD )
		float dotNV = saturate( dot( geometryNormal, geometryViewDir ) );
		reflectedLight.indirectSpecular *= computeSpecularOcclusion( dotNV, ambientOcclusion, material.roughness );
	#endif
#endif`,mx=`#ifdef USE_AOMAP
	uniform sampler2D aoMap;
	uniform float aoMapIntensity;
#endif`,gx=`#ifdef USE_BATCHING
	#if ! defined( GL_ANGLE_multi_draw )
	#define gl_DrawID _gl_DrawID
	uniform int _gl_DrawID;
	#endif
	uniform highp sampler2D batchingTexture;
	uniform highp usampler2D batchingIdTexture;
	mat4 getBatchingMatrix( const in float i ) {
		int size = textureSize( batchingTexture, 0 ).x;
		int j = int( i ) * 4;
		int x = j % size;
		int y = j / size;
		vec4 v1 = texelFetch( batchingTexture, ivec2( x, y ), 0 );
		vec4 v2 = texelFetch( batchingTexture, ivec2( x + 1, y ), 0 );
		vec4 v3 = texelFetch( batchingTexture, ivec2( x + 2, y ), 0 );
		vec4 v4 = texelFetch( batchingTexture, ivec2( x + 3, y ), 0 );
		return mat4( v1, v2, v3, v4 );
	}
	float getIndirectIndex( const in int i ) {
		int size = textureSize( batchingIdTexture, 0 ).x;
		int x = i % size;
		int y = i / size;
		return float( texelFetch( batchingIdTexture, ivec2( x, y ), 0 ).r );
	}
#endif
#ifdef USE_BATCHING_COLOR
	uniform sampler2D batchingColorTexture;
	vec4 getBatchingColor( const in float i ) {
		int size = textureSize( batchingColorTexture, 0 ).x;
		int j = int( i );
		int x = j % size;
		int y = j / size;
		return texelFetch( batchingColorTexture, ivec2( x, y ), 0 );
	}
#endif`,_x=`#ifdef USE_BATCHING
	mat4 batchingMatrix = getBatchingMatrix( getIndirectIndex( gl_DrawID ) );
#endif`,xx=`vec3 transformed = vec3( position );
#ifdef USE_ALPHAHASH
	vPosition = vec3( position );
#endif`,yx=`vec3 objectNormal = vec3( normal );
#ifdef USE_TANGENT
	vec3 objectTangent = vec3( tangent.xyz );
#endif`,vx=`float G_BlinnPhong_Implicit( ) {
	return 0.25;
}
float D_BlinnPhong( const in float shininess, const in float dotNH ) {
	return RECIPROCAL_PI * ( shininess * 0.5 + 1.0 ) * pow( dotNH, shininess );
}
vec3 BRDF_BlinnPhong( const in vec3 lightDir, const in vec3 viewDir, const in vec3 normal, const in vec3 specularColor, const in float shininess ) {
	vec3 halfDir = normalize( lightDir + viewDir );
	float dotNH = saturate( dot( normal, halfDir ) );
	float dotVH = saturate( dot( viewDir, halfDir ) );
	vec3 F = F_Schlick( specularColor, 1.0, dotVH );
	float G = G_BlinnPhong_Implicit( );
	float D = D_BlinnPhong( shininess, dotNH );
	return F * ( G * D );
} // validated`,Sx=`#ifdef USE_IRIDESCENCE
	const mat3 XYZ_TO_REC709 = mat3(
		 3.2404542, -0.9692660,  0.0556434,
		-1.5371385,  1.8760108, -0.2040259,
		-0.4985314,  0.0415560,  1.0572252
	);
	vec3 Fresnel0ToIor( vec3 fresnel0 ) {
		vec3 sqrtF0 = sqrt( fresnel0 );
		return ( vec3( 1.0 ) + sqrtF0 ) / ( vec3( 1.0 ) - sqrtF0 );
	}
	vec3 IorToFresnel0( vec3 transmittedIor, float incidentIor ) {
		return pow2( ( transmittedIor - vec3( incidentIor ) ) / ( transmittedIor + vec3( incidentIor ) ) );
	}
	float IorToFresnel0( float transmittedIor, float incidentIor ) {
		return pow2( ( transmittedIor - incidentIor ) / ( transmittedIor + incidentIor ));
	}
	vec3 evalSensitivity( float OPD, vec3 shift ) {
		float phase = 2.0 * PI * OPD * 1.0e-9;
		vec3 val = vec3( 5.4856e-13, 4.4201e-13, 5.2481e-13 );
		vec3 pos = vec3( 1.6810e+06, 1.7953e+06, 2.2084e+06 );
		vec3 var = vec3( 4.3278e+09, 9.3046e+09, 6.6121e+09 );
		vec3 xyz = val * sqrt( 2.0 * PI * var ) * cos( pos * phase + shift ) * exp( - pow2( phase ) * var );
		xyz.x += 9.7470e-14 * sqrt( 2.0 * PI * 4.5282e+09 ) * cos( 2.2399e+06 * phase + shift[ 0 ] ) * exp( - 4.5282e+09 * pow2( phase ) );
		xyz /= 1.0685e-7;
		vec3 rgb = XYZ_TO_REC709 * xyz;
		return rgb;
	}
	vec3 evalIridescence( float outsideIOR, float eta2, float cosTheta1, float thinFilmThickness, vec3 baseF0 ) {
		vec3 I;
		float iridescenceIOR = mix( outsideIOR, eta2, smoothstep( 0.0, 0.03, thinFilmThickness ) );
		float sinTheta2Sq = pow2( outsideIOR / iridescenceIOR ) * ( 1.0 - pow2( cosTheta1 ) );
		float cosTheta2Sq = 1.0 - sinTheta2Sq;
		if ( cosTheta2Sq < 0.0 ) {
			return vec3( 1.0 );
		}
		float cosTheta2 = sqrt( cosTheta2Sq );
		float R0 = IorToFresnel0( iridescenceIOR, outsideIOR );
		float R12 = F_Schlick( R0, 1.0, cosTheta1 );
		float T121 = 1.0 - R12;
		float phi12 = 0.0;
		if ( iridescenceIOR < outsideIOR ) phi12 = PI;
		float phi21 = PI - phi12;
		vec3 baseIOR = Fresnel0ToIor( clamp( baseF0, 0.0, 0.9999 ) );		vec3 R1 = IorToFresnel0( baseIOR, iridescenceIOR );
		vec3 R23 = F_Schlick( R1, 1.0, cosTheta2 );
		vec3 phi23 = vec3( 0.0 );
		if ( baseIOR[ 0 ] < iridescenceIOR ) phi23[ 0 ] = PI;
		if ( baseIOR[ 1 ] < iridescenceIOR ) phi23[ 1 ] = PI;
		if ( baseIOR[ 2 ] < iridescenceIOR ) phi23[ 2 ] = PI;
		float OPD = 2.0 * iridescenceIOR * thinFilmThickness * cosTheta2;
		vec3 phi = vec3( phi21 ) + phi23;
		vec3 R123 = clamp( R12 * R23, 1e-5, 0.9999 );
		vec3 r123 = sqrt( R123 );
		vec3 Rs = pow2( T121 ) * R23 / ( vec3( 1.0 ) - R123 );
		vec3 C0 = R12 + Rs;
		I = C0;
		vec3 Cm = Rs - T121;
		for ( int m = 1; m <= 2; ++ m ) {
			Cm *= r123;
			vec3 Sm = 2.0 * evalSensitivity( float( m ) * OPD, float( m ) * phi );
			I += Cm * Sm;
		}
		return max( I, vec3( 0.0 ) );
	}
#endif`,Mx=`#ifdef USE_BUMPMAP
	uniform sampler2D bumpMap;
	uniform float bumpScale;
	vec2 dHdxy_fwd() {
		vec2 dSTdx = dFdx( vBumpMapUv );
		vec2 dSTdy = dFdy( vBumpMapUv );
		float Hll = bumpScale * texture2D( bumpMap, vBumpMapUv ).x;
		float dBx = bumpScale * texture2D( bumpMap, vBumpMapUv + dSTdx ).x - Hll;
		float dBy = bumpScale * texture2D( bumpMap, vBumpMapUv + dSTdy ).x - Hll;
		return vec2( dBx, dBy );
	}
	vec3 perturbNormalArb( vec3 surf_pos, vec3 surf_norm, vec2 dHdxy, float faceDirection ) {
		vec3 vSigmaX = normalize( dFdx( surf_pos.xyz ) );
		vec3 vSigmaY = normalize( dFdy( surf_pos.xyz ) );
		vec3 vN = surf_norm;
		vec3 R1 = cross( vSigmaY, vN );
		vec3 R2 = cross( vN, vSigmaX );
		float fDet = dot( vSigmaX, R1 ) * faceDirection;
		vec3 vGrad = sign( fDet ) * ( dHdxy.x * R1 + dHdxy.y * R2 );
		return normalize( abs( fDet ) * surf_norm - vGrad );
	}
#endif`,bx=`#if NUM_CLIPPING_PLANES > 0
	vec4 plane;
	#ifdef ALPHA_TO_COVERAGE
		float distanceToPlane, distanceGradient;
		float clipOpacity = 1.0;
		#pragma unroll_loop_start
		for ( int i = 0; i < UNION_CLIPPING_PLANES; i ++ ) {
			plane = clippingPlanes[ i ];
			distanceToPlane = - dot( vClipPosition, plane.xyz ) + plane.w;
			distanceGradient = fwidth( distanceToPlane ) / 2.0;
			clipOpacity *= smoothstep( - distanceGradient, distanceGradient, distanceToPlane );
			if ( clipOpacity == 0.0 ) discard;
		}
		#pragma unroll_loop_end
		#if UNION_CLIPPING_PLANES < NUM_CLIPPING_PLANES
			float unionClipOpacity = 1.0;
			#pragma unroll_loop_start
			for ( int i = UNION_CLIPPING_PLANES; i < NUM_CLIPPING_PLANES; i ++ ) {
				plane = clippingPlanes[ i ];
				distanceToPlane = - dot( vClipPosition, plane.xyz ) + plane.w;
				distanceGradient = fwidth( distanceToPlane ) / 2.0;
				unionClipOpacity *= 1.0 - smoothstep( - distanceGradient, distanceGradient, distanceToPlane );
			}
			#pragma unroll_loop_end
			clipOpacity *= 1.0 - unionClipOpacity;
		#endif
		diffuseColor.a *= clipOpacity;
		if ( diffuseColor.a == 0.0 ) discard;
	#else
		#pragma unroll_loop_start
		for ( int i = 0; i < UNION_CLIPPING_PLANES; i ++ ) {
			plane = clippingPlanes[ i ];
			if ( dot( vClipPosition, plane.xyz ) > plane.w ) discard;
		}
		#pragma unroll_loop_end
		#if UNION_CLIPPING_PLANES < NUM_CLIPPING_PLANES
			bool clipped = true;
			#pragma unroll_loop_start
			for ( int i = UNION_CLIPPING_PLANES; i < NUM_CLIPPING_PLANES; i ++ ) {
				plane = clippingPlanes[ i ];
				clipped = ( dot( vClipPosition, plane.xyz ) > plane.w ) && clipped;
			}
			#pragma unroll_loop_end
			if ( clipped ) discard;
		#endif
	#endif
#endif`,wx=`#if NUM_CLIPPING_PLANES > 0
	varying vec3 vClipPosition;
	uniform vec4 clippingPlanes[ NUM_CLIPPING_PLANES ];
#endif`,Ex=`#if NUM_CLIPPING_PLANES > 0
	varying vec3 vClipPosition;
#endif`,Tx=`#if NUM_CLIPPING_PLANES > 0
	vClipPosition = - mvPosition.xyz;
#endif`,Ax=`#if defined( USE_COLOR ) || defined( USE_COLOR_ALPHA )
	diffuseColor *= vColor;
#endif`,Rx=`#if defined( USE_COLOR ) || defined( USE_COLOR_ALPHA )
	varying vec4 vColor;
#endif`,Cx=`#if defined( USE_COLOR ) || defined( USE_COLOR_ALPHA ) || defined( USE_INSTANCING_COLOR ) || defined( USE_BATCHING_COLOR )
	varying vec4 vColor;
#endif`,Px=`#if defined( USE_COLOR ) || defined( USE_COLOR_ALPHA ) || defined( USE_INSTANCING_COLOR ) || defined( USE_BATCHING_COLOR )
	vColor = vec4( 1.0 );
#endif
#ifdef USE_COLOR_ALPHA
	vColor *= color;
#elif defined( USE_COLOR )
	vColor.rgb *= color;
#endif
#ifdef USE_INSTANCING_COLOR
	vColor.rgb *= instanceColor.rgb;
#endif
#ifdef USE_BATCHING_COLOR
	vColor *= getBatchingColor( getIndirectIndex( gl_DrawID ) );
#endif`,Ix=`#define PI 3.141592653589793
#define PI2 6.283185307179586
#define PI_HALF 1.5707963267948966
#define RECIPROCAL_PI 0.3183098861837907
#define RECIPROCAL_PI2 0.15915494309189535
#define EPSILON 1e-6
#ifndef saturate
#define saturate( a ) clamp( a, 0.0, 1.0 )
#endif
#define whiteComplement( a ) ( 1.0 - saturate( a ) )
float pow2( const in float x ) { return x*x; }
vec3 pow2( const in vec3 x ) { return x*x; }
float pow3( const in float x ) { return x*x*x; }
float pow4( const in float x ) { float x2 = x*x; return x2*x2; }
float max3( const in vec3 v ) { return max( max( v.x, v.y ), v.z ); }
float average( const in vec3 v ) { return dot( v, vec3( 0.3333333 ) ); }
highp float rand( const in vec2 uv ) {
	const highp float a = 12.9898, b = 78.233, c = 43758.5453;
	highp float dt = dot( uv.xy, vec2( a,b ) ), sn = mod( dt, PI );
	return fract( sin( sn ) * c );
}
#ifdef HIGH_PRECISION
	float precisionSafeLength( vec3 v ) { return length( v ); }
#else
	float precisionSafeLength( vec3 v ) {
		float maxComponent = max3( abs( v ) );
		return length( v / maxComponent ) * maxComponent;
	}
#endif
struct IncidentLight {
	vec3 color;
	vec3 direction;
	bool visible;
};
struct ReflectedLight {
	vec3 directDiffuse;
	vec3 directSpecular;
	vec3 indirectDiffuse;
	vec3 indirectSpecular;
};
#ifdef USE_ALPHAHASH
	varying vec3 vPosition;
#endif
vec3 transformDirection( in vec3 dir, in mat4 matrix ) {
	return normalize( ( matrix * vec4( dir, 0.0 ) ).xyz );
}
#define inverseTransformDirection transformDirectionByInverseViewMatrix
vec3 transformNormalByInverseViewMatrix( in vec3 normal, in mat4 viewMatrix ) {
	return normalize( ( vec4( normal, 0.0 ) * viewMatrix ).xyz );
}
vec3 transformDirectionByInverseViewMatrix( in vec3 dir, in mat4 viewMatrix ) {
	return normalize( ( vec4( dir, 0.0 ) * viewMatrix ).xyz );
}
bool isPerspectiveMatrix( mat4 m ) {
	return m[ 2 ][ 3 ] == - 1.0;
}
vec2 equirectUv( in vec3 dir ) {
	float u = atan( dir.z, dir.x ) * RECIPROCAL_PI2 + 0.5;
	float v = asin( clamp( dir.y, - 1.0, 1.0 ) ) * RECIPROCAL_PI + 0.5;
	return vec2( u, v );
}
vec3 BRDF_Lambert( const in vec3 diffuseColor ) {
	return RECIPROCAL_PI * diffuseColor;
}
vec3 F_Schlick( const in vec3 f0, const in float f90, const in float dotVH ) {
	float fresnel = exp2( ( - 5.55473 * dotVH - 6.98316 ) * dotVH );
	return f0 * ( 1.0 - fresnel ) + ( f90 * fresnel );
}
float F_Schlick( const in float f0, const in float f90, const in float dotVH ) {
	float fresnel = exp2( ( - 5.55473 * dotVH - 6.98316 ) * dotVH );
	return f0 * ( 1.0 - fresnel ) + ( f90 * fresnel );
} // validated`,Lx=`vec3 transformedNormal = objectNormal;
#ifdef USE_TANGENT
	vec3 transformedTangent = objectTangent;
#endif
#ifdef USE_BATCHING
	mat3 bm = mat3( batchingMatrix );
	transformedNormal /= vec3( dot( bm[ 0 ], bm[ 0 ] ), dot( bm[ 1 ], bm[ 1 ] ), dot( bm[ 2 ], bm[ 2 ] ) );
	transformedNormal = bm * transformedNormal;
	#ifdef USE_TANGENT
		transformedTangent = bm * transformedTangent;
	#endif
#endif
#ifdef USE_INSTANCING
	mat3 im = mat3( instanceMatrix );
	transformedNormal /= vec3( dot( im[ 0 ], im[ 0 ] ), dot( im[ 1 ], im[ 1 ] ), dot( im[ 2 ], im[ 2 ] ) );
	transformedNormal = im * transformedNormal;
	#ifdef USE_TANGENT
		transformedTangent = im * transformedTangent;
	#endif
#endif
transformedNormal = normalMatrix * transformedNormal;
#ifdef FLIP_SIDED
	transformedNormal = - transformedNormal;
#endif
#ifdef USE_TANGENT
	transformedTangent = ( modelViewMatrix * vec4( transformedTangent, 0.0 ) ).xyz;
#endif`,Dx=`#ifdef USE_DISPLACEMENTMAP
	uniform sampler2D displacementMap;
	uniform float displacementScale;
	uniform float displacementBias;
#endif`,Nx=`#ifdef USE_DISPLACEMENTMAP
	transformed += normalize( objectNormal ) * ( texture2D( displacementMap, vDisplacementMapUv ).x * displacementScale + displacementBias );
#endif`,Ux=`#ifdef USE_EMISSIVEMAP
	vec4 emissiveColor = texture2D( emissiveMap, vEmissiveMapUv );
	#ifdef DECODE_VIDEO_TEXTURE_EMISSIVE
		emissiveColor = sRGBTransferEOTF( emissiveColor );
	#endif
	totalEmissiveRadiance *= emissiveColor.rgb;
#endif`,Fx=`#ifdef USE_EMISSIVEMAP
	uniform sampler2D emissiveMap;
#endif`,Ox="gl_FragColor = linearToOutputTexel( gl_FragColor );",Bx=`vec4 LinearTransferOETF( in vec4 value ) {
	return value;
}
vec4 sRGBTransferEOTF( in vec4 value ) {
	return vec4( mix( pow( value.rgb * 0.9478672986 + vec3( 0.0521327014 ), vec3( 2.4 ) ), value.rgb * 0.0773993808, vec3( lessThanEqual( value.rgb, vec3( 0.04045 ) ) ) ), value.a );
}
vec4 sRGBTransferOETF( in vec4 value ) {
	return vec4( mix( pow( value.rgb, vec3( 0.41666 ) ) * 1.055 - vec3( 0.055 ), value.rgb * 12.92, vec3( lessThanEqual( value.rgb, vec3( 0.0031308 ) ) ) ), value.a );
}`,kx=`#ifdef USE_ENVMAP
	#ifdef ENV_WORLDPOS
		vec3 cameraToFrag;
		if ( isOrthographic ) {
			cameraToFrag = normalize( vec3( - viewMatrix[ 0 ][ 2 ], - viewMatrix[ 1 ][ 2 ], - viewMatrix[ 2 ][ 2 ] ) );
		} else {
			cameraToFrag = normalize( vWorldPosition - cameraPosition );
		}
		vec3 worldNormal = transformNormalByInverseViewMatrix( normal, viewMatrix );
		#ifdef ENVMAP_MODE_REFLECTION
			vec3 reflectVec = reflect( cameraToFrag, worldNormal );
		#else
			vec3 reflectVec = refract( cameraToFrag, worldNormal, refractionRatio );
		#endif
	#else
		vec3 reflectVec = vReflect;
	#endif
	#ifdef ENVMAP_TYPE_CUBE
		vec4 envColor = textureCube( envMap, envMapRotation * reflectVec );
		#ifdef ENVMAP_BLENDING_MULTIPLY
			outgoingLight = mix( outgoingLight, outgoingLight * envColor.xyz, specularStrength * reflectivity );
		#elif defined( ENVMAP_BLENDING_MIX )
			outgoingLight = mix( outgoingLight, envColor.xyz, specularStrength * reflectivity );
		#elif defined( ENVMAP_BLENDING_ADD )
			outgoingLight += envColor.xyz * specularStrength * reflectivity;
		#endif
	#endif
#endif`,zx=`#ifdef USE_ENVMAP
	uniform float envMapIntensity;
	uniform mat3 envMapRotation;
	uniform samplerCube envMap;
	#ifdef ENVMAP_TYPE_PMREM
		float roughnessToMip( const in float roughness ) {
			float r = clamp( roughness, 0.0, 1.0 );
			return ENVMAP_MAX_LOD * r * ( 2.0 - r );
		}
	#endif
#endif`,Vx=`#ifdef USE_ENVMAP
	uniform float reflectivity;
	#if defined( USE_BUMPMAP ) || defined( USE_NORMALMAP ) || defined( PHONG ) || defined( LAMBERT )
		#define ENV_WORLDPOS
	#endif
	#ifdef ENV_WORLDPOS
		varying vec3 vWorldPosition;
		uniform float refractionRatio;
	#else
		varying vec3 vReflect;
	#endif
#endif`,Gx=`#ifdef USE_ENVMAP
	#if defined( USE_BUMPMAP ) || defined( USE_NORMALMAP ) || defined( PHONG ) || defined( LAMBERT )
		#define ENV_WORLDPOS
	#endif
	#ifdef ENV_WORLDPOS
		
		varying vec3 vWorldPosition;
	#else
		varying vec3 vReflect;
		uniform float refractionRatio;
	#endif
#endif`,Hx=`#ifdef USE_ENVMAP
	#ifdef ENV_WORLDPOS
		vWorldPosition = worldPosition.xyz;
	#else
		vec3 cameraToVertex;
		if ( isOrthographic ) {
			cameraToVertex = normalize( vec3( - viewMatrix[ 0 ][ 2 ], - viewMatrix[ 1 ][ 2 ], - viewMatrix[ 2 ][ 2 ] ) );
		} else {
			cameraToVertex = normalize( worldPosition.xyz - cameraPosition );
		}
		vec3 worldNormal = transformNormalByInverseViewMatrix( transformedNormal, viewMatrix );
		#ifdef ENVMAP_MODE_REFLECTION
			vReflect = reflect( cameraToVertex, worldNormal );
		#else
			vReflect = refract( cameraToVertex, worldNormal, refractionRatio );
		#endif
	#endif
#endif`,Wx=`#ifdef USE_FOG
	vFogDepth = - mvPosition.z;
#endif`,Xx=`#ifdef USE_FOG
	varying float vFogDepth;
#endif`,qx=`#ifdef USE_FOG
	#ifdef FOG_EXP2
		float fogFactor = 1.0 - exp( - fogDensity * fogDensity * vFogDepth * vFogDepth );
	#else
		float fogFactor = smoothstep( fogNear, fogFar, vFogDepth );
	#endif
	gl_FragColor.rgb = mix( gl_FragColor.rgb, fogColor, fogFactor );
#endif`,Yx=`#ifdef USE_FOG
	uniform vec3 fogColor;
	varying float vFogDepth;
	#ifdef FOG_EXP2
		uniform float fogDensity;
	#else
		uniform float fogNear;
		uniform float fogFar;
	#endif
#endif`,Zx=`#ifdef USE_GRADIENTMAP
	uniform sampler2D gradientMap;
#endif
vec3 getGradientIrradiance( vec3 normal, vec3 lightDirection ) {
	float dotNL = dot( normal, lightDirection );
	vec2 coord = vec2( dotNL * 0.5 + 0.5, 0.0 );
	#ifdef USE_GRADIENTMAP
		return vec3( texture2D( gradientMap, coord ).r );
	#else
		vec2 fw = fwidth( coord ) * 0.5;
		return mix( vec3( 0.7 ), vec3( 1.0 ), smoothstep( 0.7 - fw.x, 0.7 + fw.x, coord.x ) );
	#endif
}`,$x=`#ifdef USE_LIGHTMAP
	uniform sampler2D lightMap;
	uniform float lightMapIntensity;
#endif`,Jx=`LambertMaterial material;
material.diffuseColor = diffuseColor.rgb;
material.specularStrength = specularStrength;`,Kx=`varying vec3 vViewPosition;
struct LambertMaterial {
	vec3 diffuseColor;
	float specularStrength;
};
void RE_Direct_Lambert( const in IncidentLight directLight, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in LambertMaterial material, inout ReflectedLight reflectedLight ) {
	float dotNL = saturate( dot( geometryNormal, directLight.direction ) );
	vec3 irradiance = dotNL * directLight.color;
	reflectedLight.directDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
}
void RE_IndirectDiffuse_Lambert( const in vec3 irradiance, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in LambertMaterial material, inout ReflectedLight reflectedLight ) {
	reflectedLight.indirectDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
}
#define RE_Direct				RE_Direct_Lambert
#define RE_IndirectDiffuse		RE_IndirectDiffuse_Lambert`,jx=`uniform bool receiveShadow;
uniform vec3 ambientLightColor;
#if defined( USE_LIGHT_PROBES )
	uniform vec3 lightProbe[ 9 ];
#endif
vec3 shGetIrradianceAt( in vec3 normal, in vec3 shCoefficients[ 9 ] ) {
	float x = normal.x, y = normal.y, z = normal.z;
	vec3 result = shCoefficients[ 0 ] * 0.886227;
	result += shCoefficients[ 1 ] * 2.0 * 0.511664 * y;
	result += shCoefficients[ 2 ] * 2.0 * 0.511664 * z;
	result += shCoefficients[ 3 ] * 2.0 * 0.511664 * x;
	result += shCoefficients[ 4 ] * 2.0 * 0.429043 * x * y;
	result += shCoefficients[ 5 ] * 2.0 * 0.429043 * y * z;
	result += shCoefficients[ 6 ] * ( 0.743125 * z * z - 0.247708 );
	result += shCoefficients[ 7 ] * 2.0 * 0.429043 * x * z;
	result += shCoefficients[ 8 ] * 0.429043 * ( x * x - y * y );
	return result;
}
vec3 getLightProbeIrradiance( const in vec3 lightProbe[ 9 ], const in vec3 normal ) {
	vec3 worldNormal = transformNormalByInverseViewMatrix( normal, viewMatrix );
	vec3 irradiance = shGetIrradianceAt( worldNormal, lightProbe );
	return irradiance;
}
vec3 getAmbientLightIrradiance( const in vec3 ambientLightColor ) {
	vec3 irradiance = ambientLightColor;
	return irradiance;
}
float getDistanceAttenuation( const in float lightDistance, const in float cutoffDistance, const in float decayExponent ) {
	float distanceFalloff = 1.0 / max( pow( lightDistance, decayExponent ), 0.01 );
	if ( cutoffDistance > 0.0 ) {
		distanceFalloff *= pow2( saturate( 1.0 - pow4( lightDistance / cutoffDistance ) ) );
	}
	return distanceFalloff;
}
float getSpotAttenuation( const in float coneCosine, const in float penumbraCosine, const in float angleCosine ) {
	return smoothstep( coneCosine, penumbraCosine, angleCosine );
}
#if NUM_SUN_LIGHTS > 0
	struct SunLight {
		vec3 direction;
		vec3 color;
	};
	uniform SunLight sunLights[ NUM_SUN_LIGHTS ];
	void getSunLightInfo( const in SunLight sunLight, out IncidentLight light ) {
		light.color = sunLight.color;
		light.direction = sunLight.direction;
		light.visible = true;
	}
#endif
#if NUM_DIR_LIGHTS > 0
	struct DirectionalLight {
		vec3 direction;
		vec3 color;
	};
	uniform DirectionalLight directionalLights[ NUM_DIR_LIGHTS ];
	void getDirectionalLightInfo( const in DirectionalLight directionalLight, out IncidentLight light ) {
		light.color = directionalLight.color;
		light.direction = directionalLight.direction;
		light.visible = true;
	}
#endif
#if NUM_POINT_LIGHTS > 0
	struct PointLight {
		vec3 position;
		vec3 color;
		float distance;
		float decay;
	};
	uniform PointLight pointLights[ NUM_POINT_LIGHTS ];
	void getPointLightInfo( const in PointLight pointLight, const in vec3 geometryPosition, out IncidentLight light ) {
		vec3 lVector = pointLight.position - geometryPosition;
		light.direction = normalize( lVector );
		float lightDistance = length( lVector );
		light.color = pointLight.color;
		light.color *= getDistanceAttenuation( lightDistance, pointLight.distance, pointLight.decay );
		light.visible = ( light.color != vec3( 0.0 ) );
	}
#endif
#if NUM_SPOT_LIGHTS > 0
	struct SpotLight {
		vec3 position;
		vec3 direction;
		vec3 color;
		float distance;
		float decay;
		float coneCos;
		float penumbraCos;
	};
	uniform SpotLight spotLights[ NUM_SPOT_LIGHTS ];
	void getSpotLightInfo( const in SpotLight spotLight, const in vec3 geometryPosition, out IncidentLight light ) {
		vec3 lVector = spotLight.position - geometryPosition;
		light.direction = normalize( lVector );
		float angleCos = dot( light.direction, spotLight.direction );
		float spotAttenuation = getSpotAttenuation( spotLight.coneCos, spotLight.penumbraCos, angleCos );
		if ( spotAttenuation > 0.0 ) {
			float lightDistance = length( lVector );
			light.color = spotLight.color * spotAttenuation;
			light.color *= getDistanceAttenuation( lightDistance, spotLight.distance, spotLight.decay );
			light.visible = ( light.color != vec3( 0.0 ) );
		} else {
			light.color = vec3( 0.0 );
			light.visible = false;
		}
	}
#endif
#if NUM_RECT_AREA_LIGHTS > 0
	struct RectAreaLight {
		vec3 color;
		vec3 position;
		vec3 halfWidth;
		vec3 halfHeight;
	};
	uniform sampler2D ltc_1;	uniform sampler2D ltc_2;
	uniform RectAreaLight rectAreaLights[ NUM_RECT_AREA_LIGHTS ];
#endif
#if NUM_HEMI_LIGHTS > 0
	struct HemisphereLight {
		vec3 direction;
		vec3 skyColor;
		vec3 groundColor;
	};
	uniform HemisphereLight hemisphereLights[ NUM_HEMI_LIGHTS ];
	vec3 getHemisphereLightIrradiance( const in HemisphereLight hemiLight, const in vec3 normal ) {
		float dotNL = dot( normal, hemiLight.direction );
		float hemiDiffuseWeight = 0.5 * dotNL + 0.5;
		vec3 irradiance = mix( hemiLight.groundColor, hemiLight.skyColor, hemiDiffuseWeight );
		return irradiance;
	}
#endif
#include <lightprobes_pars_fragment>`,Qx=`#ifdef USE_ENVMAP
	vec3 getIBLIrradiance( const in vec3 normal ) {
		#ifdef ENVMAP_TYPE_PMREM
			vec3 worldNormal = transformNormalByInverseViewMatrix( normal, viewMatrix );
			vec4 envMapColor = textureLod( envMap, envMapRotation * worldNormal, ENVMAP_MAX_LOD );
			return PI * envMapColor.rgb * envMapIntensity;
		#else
			return vec3( 0.0 );
		#endif
	}
	vec3 getIBLRadiance( const in vec3 viewDir, const in vec3 normal, const in float roughness ) {
		#ifdef ENVMAP_TYPE_PMREM
			vec3 reflectVec = reflect( - viewDir, normal );
			reflectVec = normalize( mix( reflectVec, normal, pow4( roughness ) ) );
			reflectVec = transformDirectionByInverseViewMatrix( reflectVec, viewMatrix );
			vec4 envMapColor = textureLod( envMap, envMapRotation * reflectVec, roughnessToMip( roughness ) );
			return envMapColor.rgb * envMapIntensity;
		#else
			return vec3( 0.0 );
		#endif
	}
	#ifdef USE_RETROREFLECTION
		vec3 getIBLRetroRadiance( const in vec3 viewDir, const in vec3 normal, const in float roughness ) {
			#ifdef ENVMAP_TYPE_PMREM
				vec3 retroVec = normalize( mix( viewDir, normal, pow4( roughness ) ) );
				retroVec = transformDirectionByInverseViewMatrix( retroVec, viewMatrix );
				vec4 envMapColor = textureLod( envMap, envMapRotation * retroVec, roughnessToMip( roughness ) );
				return envMapColor.rgb * envMapIntensity;
			#else
				return vec3( 0.0 );
			#endif
		}
	#endif
	#ifdef USE_ANISOTROPY
		vec3 getIBLAnisotropyRadiance( const in vec3 viewDir, const in vec3 normal, const in float roughness, const in vec3 bitangent, const in float anisotropy ) {
			#ifdef ENVMAP_TYPE_PMREM
				vec3 bentNormal = cross( bitangent, viewDir );
				bentNormal = normalize( cross( bentNormal, bitangent ) );
				bentNormal = normalize( mix( bentNormal, normal, pow2( pow2( 1.0 - anisotropy * ( 1.0 - roughness ) ) ) ) );
				return getIBLRadiance( viewDir, bentNormal, roughness );
			#else
				return vec3( 0.0 );
			#endif
		}
		#ifdef USE_RETROREFLECTION
			vec3 getIBLAnisotropyRetroRadiance( const in vec3 viewDir, const in vec3 normal, const in float roughness, const in vec3 bitangent, const in float anisotropy ) {
				#ifdef ENVMAP_TYPE_PMREM
					vec3 bentNormal = cross( bitangent, viewDir );
					bentNormal = normalize( cross( bentNormal, bitangent ) );
					bentNormal = normalize( mix( bentNormal, normal, pow2( pow2( 1.0 - anisotropy * ( 1.0 - roughness ) ) ) ) );
					return getIBLRetroRadiance( viewDir, bentNormal, roughness );
				#else
					return vec3( 0.0 );
				#endif
			}
		#endif
	#endif
#endif`,ty=`ToonMaterial material;
material.diffuseColor = diffuseColor.rgb;`,ey=`varying vec3 vViewPosition;
struct ToonMaterial {
	vec3 diffuseColor;
};
void RE_Direct_Toon( const in IncidentLight directLight, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in ToonMaterial material, inout ReflectedLight reflectedLight ) {
	vec3 irradiance = getGradientIrradiance( geometryNormal, directLight.direction ) * directLight.color;
	reflectedLight.directDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
}
void RE_IndirectDiffuse_Toon( const in vec3 irradiance, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in ToonMaterial material, inout ReflectedLight reflectedLight ) {
	reflectedLight.indirectDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
}
#define RE_Direct				RE_Direct_Toon
#define RE_IndirectDiffuse		RE_IndirectDiffuse_Toon`,ny=`BlinnPhongMaterial material;
material.diffuseColor = diffuseColor.rgb;
material.specularColor = specular;
material.specularShininess = shininess;
material.specularStrength = specularStrength;`,iy=`varying vec3 vViewPosition;
struct BlinnPhongMaterial {
	vec3 diffuseColor;
	vec3 specularColor;
	float specularShininess;
	float specularStrength;
};
void RE_Direct_BlinnPhong( const in IncidentLight directLight, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in BlinnPhongMaterial material, inout ReflectedLight reflectedLight ) {
	float dotNL = saturate( dot( geometryNormal, directLight.direction ) );
	vec3 irradiance = dotNL * directLight.color;
	reflectedLight.directDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
	reflectedLight.directSpecular += irradiance * BRDF_BlinnPhong( directLight.direction, geometryViewDir, geometryNormal, material.specularColor, material.specularShininess ) * material.specularStrength;
}
void RE_IndirectDiffuse_BlinnPhong( const in vec3 irradiance, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in BlinnPhongMaterial material, inout ReflectedLight reflectedLight ) {
	reflectedLight.indirectDiffuse += irradiance * BRDF_Lambert( material.diffuseColor );
}
#define RE_Direct				RE_Direct_BlinnPhong
#define RE_IndirectDiffuse		RE_IndirectDiffuse_BlinnPhong`,sy=`PhysicalMaterial material;
material.diffuseColor = diffuseColor.rgb;
material.diffuseContribution = diffuseColor.rgb * ( 1.0 - metalnessFactor );
material.metalness = metalnessFactor;
vec3 dxy = max( abs( dFdx( nonPerturbedNormal ) ), abs( dFdy( nonPerturbedNormal ) ) );
float geometryRoughness = max( max( dxy.x, dxy.y ), dxy.z );
material.roughness = max( roughnessFactor, 0.045 );
material.roughness += geometryRoughness;
material.roughness = min( material.roughness, 1.0 );
#ifdef USE_DIFFUSE_ROUGHNESS
	float diffuseRoughnessFactor = diffuseRoughness;
	#ifdef USE_DIFFUSE_ROUGHNESSMAP
		diffuseRoughnessFactor *= texture2D( diffuseRoughnessMap, vDiffuseRoughnessMapUv ).r;
	#endif
	material.diffuseRoughness = saturate( diffuseRoughnessFactor );
#endif
#ifdef IOR
	material.ior = ior;
	#ifdef USE_SPECULAR
		float specularIntensityFactor = specularIntensity;
		vec3 specularColorFactor = specularColor;
		#ifdef USE_SPECULAR_COLORMAP
			specularColorFactor *= texture2D( specularColorMap, vSpecularColorMapUv ).rgb;
		#endif
		#ifdef USE_SPECULAR_INTENSITYMAP
			specularIntensityFactor *= texture2D( specularIntensityMap, vSpecularIntensityMapUv ).a;
		#endif
		material.specularF90 = mix( specularIntensityFactor, 1.0, metalnessFactor );
	#else
		float specularIntensityFactor = 1.0;
		vec3 specularColorFactor = vec3( 1.0 );
		material.specularF90 = 1.0;
	#endif
	material.specularColor = min( pow2( ( material.ior - 1.0 ) / ( material.ior + 1.0 ) ) * specularColorFactor, vec3( 1.0 ) ) * specularIntensityFactor;
	material.specularColorBlended = mix( material.specularColor, diffuseColor.rgb, metalnessFactor );
#else
	material.specularColor = vec3( 0.04 );
	material.specularColorBlended = mix( material.specularColor, diffuseColor.rgb, metalnessFactor );
	material.specularF90 = 1.0;
#endif
#ifdef USE_CLEARCOAT
	material.clearcoat = clearcoat;
	material.clearcoatRoughness = clearcoatRoughness;
	material.clearcoatF0 = vec3( 0.04 );
	material.clearcoatF90 = 1.0;
	#ifdef USE_CLEARCOATMAP
		material.clearcoat *= texture2D( clearcoatMap, vClearcoatMapUv ).x;
	#endif
	#ifdef USE_CLEARCOAT_ROUGHNESSMAP
		material.clearcoatRoughness *= texture2D( clearcoatRoughnessMap, vClearcoatRoughnessMapUv ).y;
	#endif
	material.clearcoat = saturate( material.clearcoat );	material.clearcoatRoughness = max( material.clearcoatRoughness, 0.045 );
	material.clearcoatRoughness += geometryRoughness;
	material.clearcoatRoughness = min( material.clearcoatRoughness, 1.0 );
#endif
#ifdef USE_DISPERSION
	material.dispersion = dispersion;
#endif
#ifdef USE_RETROREFLECTION
	material.retroreflectivity = retroreflectivity;
#endif
#ifdef USE_IRIDESCENCE
	material.iridescence = iridescence;
	material.iridescenceIOR = iridescenceIOR;
	#ifdef USE_IRIDESCENCEMAP
		material.iridescence *= texture2D( iridescenceMap, vIridescenceMapUv ).r;
	#endif
	#ifdef USE_IRIDESCENCE_THICKNESSMAP
		material.iridescenceThickness = (iridescenceThicknessMaximum - iridescenceThicknessMinimum) * texture2D( iridescenceThicknessMap, vIridescenceThicknessMapUv ).g + iridescenceThicknessMinimum;
	#else
		material.iridescenceThickness = iridescenceThicknessMaximum;
	#endif
#endif
#ifdef USE_SHEEN
	material.sheenColor = sheenColor;
	#ifdef USE_SHEEN_COLORMAP
		material.sheenColor *= texture2D( sheenColorMap, vSheenColorMapUv ).rgb;
	#endif
	material.sheenRoughness = clamp( sheenRoughness, 0.0001, 1.0 );
	#ifdef USE_SHEEN_ROUGHNESSMAP
		material.sheenRoughness *= texture2D( sheenRoughnessMap, vSheenRoughnessMapUv ).a;
	#endif
#endif
#ifdef USE_ANISOTROPY
	#ifdef USE_ANISOTROPYMAP
		mat2 anisotropyMat = mat2( anisotropyVector.x, anisotropyVector.y, - anisotropyVector.y, anisotropyVector.x );
		vec3 anisotropyPolar = texture2D( anisotropyMap, vAnisotropyMapUv ).rgb;
		vec2 anisotropyV = anisotropyMat * normalize( 2.0 * anisotropyPolar.rg - vec2( 1.0 ) ) * anisotropyPolar.b;
	#else
		vec2 anisotropyV = anisotropyVector;
	#endif
	material.anisotropy = length( anisotropyV );
	if( material.anisotropy == 0.0 ) {
		anisotropyV = vec2( 1.0, 0.0 );
	} else {
		anisotropyV /= material.anisotropy;
		material.anisotropy = saturate( material.anisotropy );
	}
	material.alphaT = mix( pow2( material.roughness ), 1.0, pow2( material.anisotropy ) );
	material.anisotropyT = tbn[ 0 ] * anisotropyV.x + tbn[ 1 ] * anisotropyV.y;
	material.anisotropyB = tbn[ 1 ] * anisotropyV.x - tbn[ 0 ] * anisotropyV.y;
#endif`,ry=`uniform sampler2D dfgLUT;
struct PhysicalMaterial {
	vec3 diffuseColor;
	vec3 diffuseContribution;
	vec3 specularColor;
	vec3 specularColorBlended;
	float roughness;
	float metalness;
	float specularF90;
	float dispersion;
	vec2 dfg;
	vec3 multiScatteringCompensation;
	#ifdef USE_DIFFUSE_ROUGHNESS
		float diffuseRoughness;
	#endif
	#ifdef USE_RETROREFLECTION
		float retroreflectivity;
	#endif
	#ifdef USE_CLEARCOAT
		float clearcoat;
		float clearcoatRoughness;
		vec3 clearcoatF0;
		float clearcoatF90;
	#endif
	#ifdef USE_IRIDESCENCE
		float iridescence;
		float iridescenceIOR;
		float iridescenceThickness;
		vec3 iridescenceFresnel;
		vec3 iridescenceF0Dielectric;
		vec3 iridescenceF0Metallic;
	#endif
	#ifdef USE_SHEEN
		vec3 sheenColor;
		float sheenRoughness;
	#endif
	#ifdef IOR
		float ior;
	#endif
	#ifdef USE_TRANSMISSION
		float transmission;
		float transmissionAlpha;
		float thickness;
		float attenuationDistance;
		vec3 attenuationColor;
	#endif
	#ifdef USE_ANISOTROPY
		float anisotropy;
		float alphaT;
		vec3 anisotropyT;
		vec3 anisotropyB;
	#endif
};
vec3 clearcoatSpecularDirect = vec3( 0.0 );
vec3 clearcoatSpecularIndirect = vec3( 0.0 );
vec3 sheenSpecularDirect = vec3( 0.0 );
vec3 sheenSpecularIndirect = vec3(0.0 );
vec3 Schlick_to_F0( const in vec3 f, const in float f90, const in float dotVH ) {
    float x = clamp( 1.0 - dotVH, 0.0, 1.0 );
    float x2 = x * x;
    float x5 = clamp( x * x2 * x2, 0.0, 0.9999 );
    return ( f - vec3( f90 ) * x5 ) / ( 1.0 - x5 );
}
#ifdef USE_DIFFUSE_ROUGHNESS
	const float EON_EPSILON = 1e-7;
	float FON_DirectionalAlbedo( const in float mu, const in float roughness, const in float A ) {
		float muComp = 1.0 - mu;
		float gOverPi = muComp * ( 0.0571085289 + muComp * ( 0.491881867 + muComp * ( - 0.332181442 + muComp * 0.0714429953 ) ) );
		return A * ( 1.0 + roughness * gOverPi );
	}
	vec3 BRDF_EON( const in vec3 lightDir, const in vec3 viewDir, const in vec3 normal, const in vec3 diffuseColor, const in float roughness ) {
		vec3 rho = saturate( diffuseColor );
		if ( roughness <= EON_EPSILON ) return BRDF_Lambert( rho );
		float dotNL = saturate( dot( normal, lightDir ) );
		float dotNV = saturate( dot( normal, viewDir ) );
		float s = dot( lightDir, viewDir ) - dotNL * dotNV;
		float sOverT = ( s > 0.0 ) ? s / max( max( dotNL, dotNV ), EON_EPSILON ) : s;
		float A = 1.0 / ( 1.0 + ( 0.5 - 2.0 / ( 3.0 * PI ) ) * roughness );
		vec3 singleScatter = rho * RECIPROCAL_PI * A * ( 1.0 + roughness * sOverT );
		float averageAlbedo = A * ( 1.0 + ( 2.0 / 3.0 - 28.0 / ( 15.0 * PI ) ) * roughness );
		float albedoV = FON_DirectionalAlbedo( dotNV, roughness, A );
		float albedoL = FON_DirectionalAlbedo( dotNL, roughness, A );
		vec3 rhoMultiScatter = rho * rho * averageAlbedo / max( vec3( EON_EPSILON ), vec3( 1.0 ) - rho * ( 1.0 - averageAlbedo ) );
		vec3 multiScatter = rhoMultiScatter * RECIPROCAL_PI
			* max( EON_EPSILON, 1.0 - albedoV )
			* max( EON_EPSILON, 1.0 - albedoL )
			/ max( EON_EPSILON, 1.0 - averageAlbedo );
		return singleScatter + multiScatter;
	}
	vec3 EON_DirectionalAlbedo( const in vec3 diffuseColor, const in float roughness, const in float dotNV ) {
		vec3 rho = saturate( diffuseColor );
		if ( roughness <= EON_EPSILON ) return rho;
		float A = 1.0 / ( 1.0 + ( 0.5 - 2.0 / ( 3.0 * PI ) ) * roughness );
		float directionalAlbedo = FON_DirectionalAlbedo( dotNV, roughness, A );
		float averageAlbedo = A * ( 1.0 + ( 2.0 / 3.0 - 28.0 / ( 15.0 * PI ) ) * roughness );
		vec3 rhoMultiScatter = rho * rho * averageAlbedo / max( vec3( EON_EPSILON ), vec3( 1.0 ) - rho * ( 1.0 - averageAlbedo ) );
		return rho * directionalAlbedo + rhoMultiScatter * ( 1.0 - directionalAlbedo );
	}
#endif
float V_GGX_SmithCorrelated( const in float alpha, const in float dotNL, const in float dotNV ) {
	float a2 = pow2( alpha );
	float gv = dotNL * sqrt( a2 + ( 1.0 - a2 ) * pow2( dotNV ) );
	float gl = dotNV * sqrt( a2 + ( 1.0 - a2 ) * pow2( dotNL ) );
	return 0.5 / max( gv + gl, EPSILON );
}
float D_GGX( const in float alpha, const in float dotNH ) {
	float a2 = pow2( alpha );
	float denom = pow2( dotNH ) * ( a2 - 1.0 ) + 1.0;
	return RECIPROCAL_PI * a2 / pow2( denom );
}
#ifdef USE_ANISOTROPY
	float V_GGX_SmithCorrelated_Anisotropic( const in float alphaT, const in float alphaB, const in float dotTV, const in float dotBV, const in float dotTL, const in float dotBL, const in float dotNV, const in float dotNL ) {
		float gv = dotNL * length( vec3( alphaT * dotTV, alphaB * dotBV, dotNV ) );
		float gl = dotNV * length( vec3( alphaT * dotTL, alphaB * dotBL, dotNL ) );
		return 0.5 / max( gv + gl, EPSILON );
	}
	float D_GGX_Anisotropic( const in float alphaT, const in float alphaB, const in float dotNH, const in float dotTH, const in float dotBH ) {
		float a2 = alphaT * alphaB;
		highp vec3 v = vec3( alphaB * dotTH, alphaT * dotBH, a2 * dotNH );
		highp float v2 = dot( v, v );
		float w2 = a2 / v2;
		return RECIPROCAL_PI * a2 * pow2 ( w2 );
	}
#endif
#ifdef USE_CLEARCOAT
	vec3 BRDF_GGX_Clearcoat( const in vec3 lightDir, const in vec3 viewDir, const in vec3 normal, const in PhysicalMaterial material) {
		vec3 f0 = material.clearcoatF0;
		float f90 = material.clearcoatF90;
		float roughness = max( material.clearcoatRoughness, 0.045 );
		float alpha = pow2( roughness );
		vec3 halfDir = normalize( lightDir + viewDir );
		float dotNL = saturate( dot( normal, lightDir ) );
		float dotNV = saturate( dot( normal, viewDir ) );
		float dotNH = saturate( dot( normal, halfDir ) );
		float dotVH = saturate( dot( viewDir, halfDir ) );
		vec3 F = F_Schlick( f0, f90, dotVH );
		float V = V_GGX_SmithCorrelated( alpha, dotNL, dotNV );
		float D = D_GGX( alpha, dotNH );
		return F * ( V * D );
	}
#endif
vec3 BRDF_GGX( const in vec3 lightDir, const in vec3 viewDir, const in vec3 normal, const in PhysicalMaterial material ) {
	vec3 f0 = material.specularColorBlended;
	float f90 = material.specularF90;
	float roughness = max( material.roughness, 0.045 );
	float alpha = pow2( roughness );
	vec3 halfDir = normalize( lightDir + viewDir );
	float dotNL = saturate( dot( normal, lightDir ) );
	float dotNV = saturate( dot( normal, viewDir ) );
	float dotNH = saturate( dot( normal, halfDir ) );
	float dotVH = saturate( dot( viewDir, halfDir ) );
	vec3 F = F_Schlick( f0, f90, dotVH );
	#ifdef USE_IRIDESCENCE
		F = mix( F, material.iridescenceFresnel, material.iridescence );
	#endif
	#ifdef USE_ANISOTROPY
		float dotTL = dot( material.anisotropyT, lightDir );
		float dotTV = dot( material.anisotropyT, viewDir );
		float dotTH = dot( material.anisotropyT, halfDir );
		float dotBL = dot( material.anisotropyB, lightDir );
		float dotBV = dot( material.anisotropyB, viewDir );
		float dotBH = dot( material.anisotropyB, halfDir );
		float alphaT = max( material.alphaT, alpha );
		float V = V_GGX_SmithCorrelated_Anisotropic( alphaT, alpha, dotTV, dotBV, dotTL, dotBL, dotNV, dotNL );
		float D = D_GGX_Anisotropic( alphaT, alpha, dotNH, dotTH, dotBH );
	#else
		float V = V_GGX_SmithCorrelated( alpha, dotNL, dotNV );
		float D = D_GGX( alpha, dotNH );
	#endif
	return F * ( V * D );
}
vec2 LTC_Uv( const in vec3 N, const in vec3 V, const in float roughness ) {
	const float LUT_SIZE = 64.0;
	const float LUT_SCALE = ( LUT_SIZE - 1.0 ) / LUT_SIZE;
	const float LUT_BIAS = 0.5 / LUT_SIZE;
	float dotNV = saturate( dot( N, V ) );
	vec2 uv = vec2( roughness, sqrt( 1.0 - dotNV ) );
	uv = uv * LUT_SCALE + LUT_BIAS;
	return uv;
}
float LTC_ClippedSphereFormFactor( const in vec3 f ) {
	float l = length( f );
	return max( ( l * l + f.z ) / ( l + 1.0 ), 0.0 );
}
vec3 LTC_EdgeVectorFormFactor( const in vec3 v1, const in vec3 v2 ) {
	float x = dot( v1, v2 );
	float y = abs( x );
	float a = 0.8543985 + ( 0.4965155 + 0.0145206 * y ) * y;
	float b = 3.4175940 + ( 4.1616724 + y ) * y;
	float v = a / b;
	float theta_sintheta = ( x > 0.0 ) ? v : 0.5 * inversesqrt( max( 1.0 - x * x, 1e-7 ) ) - v;
	return cross( v1, v2 ) * theta_sintheta;
}
vec3 LTC_Evaluate( const in vec3 N, const in vec3 V, const in vec3 P, const in mat3 mInv, const in vec3 rectCoords[ 4 ] ) {
	vec3 v1 = rectCoords[ 1 ] - rectCoords[ 0 ];
	vec3 v2 = rectCoords[ 3 ] - rectCoords[ 0 ];
	vec3 lightNormal = cross( v1, v2 );
	if( dot( lightNormal, P - rectCoords[ 0 ] ) < 0.0 ) return vec3( 0.0 );
	vec3 T1, T2;
	T1 = normalize( V - N * dot( V, N ) );
	T2 = - cross( N, T1 );
	mat3 mat = mInv * transpose( mat3( T1, T2, N ) );
	vec3 coords[ 4 ];
	coords[ 0 ] = mat * ( rectCoords[ 0 ] - P );
	coords[ 1 ] = mat * ( rectCoords[ 1 ] - P );
	coords[ 2 ] = mat * ( rectCoords[ 2 ] - P );
	coords[ 3 ] = mat * ( rectCoords[ 3 ] - P );
	coords[ 0 ] = normalize( coords[ 0 ] );
	coords[ 1 ] = normalize( coords[ 1 ] );
	coords[ 2 ] = normalize( coords[ 2 ] );
	coords[ 3 ] = normalize( coords[ 3 ] );
	vec3 vectorFormFactor = vec3( 0.0 );
	vectorFormFactor += LTC_EdgeVectorFormFactor( coords[ 0 ], coords[ 1 ] );
	vectorFormFactor += LTC_EdgeVectorFormFactor( coords[ 1 ], coords[ 2 ] );
	vectorFormFactor += LTC_EdgeVectorFormFactor( coords[ 2 ], coords[ 3 ] );
	vectorFormFactor += LTC_EdgeVectorFormFactor( coords[ 3 ], coords[ 0 ] );
	float result = LTC_ClippedSphereFormFactor( vectorFormFactor );
	return vec3( result );
}
#if defined( USE_SHEEN )
float D_Charlie( float roughness, float dotNH ) {
	float alpha = pow2( roughness );
	float invAlpha = 1.0 / alpha;
	float cos2h = dotNH * dotNH;
	float sin2h = max( 1.0 - cos2h, 0.0078125 );
	return ( 2.0 + invAlpha ) * pow( sin2h, invAlpha * 0.5 ) / ( 2.0 * PI );
}
float V_Neubelt( float dotNV, float dotNL ) {
	return saturate( 1.0 / ( 4.0 * ( dotNL + dotNV - dotNL * dotNV ) ) );
}
vec3 BRDF_Sheen( const in vec3 lightDir, const in vec3 viewDir, const in vec3 normal, vec3 sheenColor, const in float sheenRoughness ) {
	vec3 halfDir = normalize( lightDir + viewDir );
	float dotNL = saturate( dot( normal, lightDir ) );
	float dotNV = saturate( dot( normal, viewDir ) );
	float dotNH = saturate( dot( normal, halfDir ) );
	float D = D_Charlie( sheenRoughness, dotNH );
	float V = V_Neubelt( dotNV, dotNL );
	return sheenColor * ( D * V );
}
#endif
float IBLSheenBRDF( const in vec3 normal, const in vec3 viewDir, const in float roughness ) {
	float dotNV = saturate( dot( normal, viewDir ) );
	float r2 = roughness * roughness;
	float rInv = 1.0 / ( roughness + 0.1 );
	float a = -1.9362 + 1.0678 * roughness + 0.4573 * r2 - 0.8469 * rInv;
	float b = -0.6014 + 0.5538 * roughness - 0.4670 * r2 - 0.1255 * rInv;
	float DG = exp( a * dotNV + b );
	return saturate( DG );
}
vec3 EnvironmentBRDF( const in vec3 normal, const in vec3 viewDir, const in vec3 specularColor, const in float specularF90, const in float roughness ) {
	float dotNV = saturate( dot( normal, viewDir ) );
	vec2 fab = texture2D( dfgLUT, vec2( roughness, dotNV ) ).rg;
	return specularColor * fab.x + specularF90 * fab.y;
}
#ifdef USE_IRIDESCENCE
void computeMultiscatteringIridescence( const in vec2 fab, const in vec3 specularColor, const in float specularF90, const in float iridescence, const in vec3 iridescenceF0, inout vec3 singleScatter, inout vec3 multiScatter ) {
#else
void computeMultiscattering( const in vec2 fab, const in vec3 specularColor, const in float specularF90, inout vec3 singleScatter, inout vec3 multiScatter ) {
#endif
	#ifdef USE_IRIDESCENCE
		vec3 Fr = mix( specularColor, iridescenceF0, iridescence );
	#else
		vec3 Fr = specularColor;
	#endif
	vec3 FssEss = Fr * fab.x + specularF90 * fab.y;
	float Ess = fab.x + fab.y;
	float Ems = 1.0 - Ess;
	vec3 Favg = Fr + ( 1.0 - Fr ) * 0.047619;	vec3 Fms = FssEss * Favg / ( 1.0 - Ems * Favg );
	singleScatter += FssEss;
	multiScatter += Fms * Ems;
}
#if NUM_RECT_AREA_LIGHTS > 0
	void RE_Direct_RectArea_Physical( const in RectAreaLight rectAreaLight, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in PhysicalMaterial material, inout ReflectedLight reflectedLight ) {
		vec3 normal = geometryNormal;
		vec3 viewDir = geometryViewDir;
		vec3 position = geometryPosition;
		vec3 lightPos = rectAreaLight.position;
		vec3 halfWidth = rectAreaLight.halfWidth;
		vec3 halfHeight = rectAreaLight.halfHeight;
		vec3 lightColor = rectAreaLight.color;
		float roughness = material.roughness;
		vec3 rectCoords[ 4 ];
		rectCoords[ 0 ] = lightPos + halfWidth - halfHeight;		rectCoords[ 1 ] = lightPos - halfWidth - halfHeight;
		rectCoords[ 2 ] = lightPos - halfWidth + halfHeight;
		rectCoords[ 3 ] = lightPos + halfWidth + halfHeight;
		vec2 uv = LTC_Uv( normal, viewDir, roughness );
		vec4 t1 = texture2D( ltc_1, uv );
		vec4 t2 = texture2D( ltc_2, uv );
		mat3 mInv = mat3(
			vec3( t1.x, 0, t1.y ),
			vec3(    0, 1,    0 ),
			vec3( t1.z, 0, t1.w )
		);
		vec3 fresnel = ( material.specularColorBlended * t2.x + ( material.specularF90 - material.specularColorBlended ) * t2.y );
		reflectedLight.directSpecular += lightColor * fresnel * LTC_Evaluate( normal, viewDir, position, mInv, rectCoords );
		reflectedLight.directDiffuse += lightColor * material.diffuseContribution * LTC_Evaluate( normal, viewDir, position, mat3( 1.0 ), rectCoords );
		#ifdef USE_CLEARCOAT
			vec3 Ncc = geometryClearcoatNormal;
			vec2 uvClearcoat = LTC_Uv( Ncc, viewDir, material.clearcoatRoughness );
			vec4 t1Clearcoat = texture2D( ltc_1, uvClearcoat );
			vec4 t2Clearcoat = texture2D( ltc_2, uvClearcoat );
			mat3 mInvClearcoat = mat3(
				vec3( t1Clearcoat.x, 0, t1Clearcoat.y ),
				vec3(             0, 1,             0 ),
				vec3( t1Clearcoat.z, 0, t1Clearcoat.w )
			);
			vec3 fresnelClearcoat = material.clearcoatF0 * t2Clearcoat.x + ( material.clearcoatF90 - material.clearcoatF0 ) * t2Clearcoat.y;
			clearcoatSpecularDirect += lightColor * fresnelClearcoat * LTC_Evaluate( Ncc, viewDir, position, mInvClearcoat, rectCoords );
		#endif
	}
#endif
void RE_Direct_Physical( const in IncidentLight directLight, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in PhysicalMaterial material, inout ReflectedLight reflectedLight ) {
	float dotNL = saturate( dot( geometryNormal, directLight.direction ) );
	vec3 irradiance = dotNL * directLight.color;
	#ifdef USE_CLEARCOAT
		float dotNLcc = saturate( dot( geometryClearcoatNormal, directLight.direction ) );
		vec3 ccIrradiance = dotNLcc * directLight.color;
		clearcoatSpecularDirect += ccIrradiance * BRDF_GGX_Clearcoat( directLight.direction, geometryViewDir, geometryClearcoatNormal, material );
	#endif
	#ifdef USE_SHEEN
 
 		sheenSpecularDirect += irradiance * BRDF_Sheen( directLight.direction, geometryViewDir, geometryNormal, material.sheenColor, material.sheenRoughness );
 
 		float sheenAlbedoV = IBLSheenBRDF( geometryNormal, geometryViewDir, material.sheenRoughness );
 		float sheenAlbedoL = IBLSheenBRDF( geometryNormal, directLight.direction, material.sheenRoughness );
 
 		float sheenEnergyComp = 1.0 - max3( material.sheenColor ) * max( sheenAlbedoV, sheenAlbedoL );
 
 		irradiance *= sheenEnergyComp;
 
 	#endif
	vec3 specularBRDF = BRDF_GGX( directLight.direction, geometryViewDir, geometryNormal, material );
	#ifdef USE_RETROREFLECTION
		vec3 retroViewDir = reflect( - geometryViewDir, geometryNormal );
		vec3 retroSpecularBRDF = BRDF_GGX( directLight.direction, retroViewDir, geometryNormal, material );
		specularBRDF = mix( specularBRDF, retroSpecularBRDF, saturate( material.retroreflectivity ) );
	#endif
	reflectedLight.directSpecular += irradiance * specularBRDF * material.multiScatteringCompensation;
	vec3 halfDir = normalize( directLight.direction + geometryViewDir );
	float dotVH = saturate( dot( geometryViewDir, halfDir ) );
	vec3 F = F_Schlick( material.specularColor, material.specularF90, dotVH );
	#ifdef USE_RETROREFLECTION
		vec3 retroHalfDir = normalize( directLight.direction + retroViewDir );
		float dotRetroVH = saturate( dot( retroViewDir, retroHalfDir ) );
		vec3 retroF = F_Schlick( material.specularColor, material.specularF90, dotRetroVH );
		F = mix( F, retroF, saturate( material.retroreflectivity ) );
	#endif
	#ifdef USE_DIFFUSE_ROUGHNESS
		vec3 diffuseBRDF = BRDF_EON( directLight.direction, geometryViewDir, geometryNormal, material.diffuseColor, material.diffuseRoughness ) * ( 1.0 - material.metalness );
	#else
		vec3 diffuseBRDF = BRDF_Lambert( material.diffuseContribution );
	#endif
	reflectedLight.directDiffuse += irradiance * diffuseBRDF * ( 1.0 - F );
}
void RE_IndirectDiffuse_Physical( const in vec3 irradiance, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in PhysicalMaterial material, inout ReflectedLight reflectedLight ) {
	vec3 singleScattering = vec3( 0.0 );
	vec3 multiScattering = vec3( 0.0 );
	#ifdef USE_IRIDESCENCE
		computeMultiscatteringIridescence( material.dfg, material.specularColor, material.specularF90, material.iridescence, material.iridescenceF0Dielectric, singleScattering, multiScattering );
	#else
		computeMultiscattering( material.dfg, material.specularColor, material.specularF90, singleScattering, multiScattering );
	#endif
	#ifdef USE_DIFFUSE_ROUGHNESS
		float dotNV = saturate( dot( geometryNormal, geometryViewDir ) );
		vec3 diffuseAlbedo = EON_DirectionalAlbedo( material.diffuseColor, material.diffuseRoughness, dotNV ) * ( 1.0 - material.metalness );
		vec3 diffuse = irradiance * RECIPROCAL_PI * diffuseAlbedo * ( 1.0 - singleScattering - multiScattering );
	#else
		vec3 diffuse = irradiance * BRDF_Lambert( material.diffuseContribution ) * ( 1.0 - singleScattering - multiScattering );
	#endif
	#ifdef USE_SHEEN
		float sheenAlbedo = IBLSheenBRDF( geometryNormal, geometryViewDir, material.sheenRoughness );
		sheenSpecularIndirect += irradiance * material.sheenColor * sheenAlbedo * RECIPROCAL_PI;
		float sheenEnergyComp = 1.0 - max3( material.sheenColor ) * sheenAlbedo;
		diffuse *= sheenEnergyComp;
	#endif
	reflectedLight.indirectDiffuse += diffuse;
}
void RE_IndirectSpecular_Physical( const in vec3 radiance, const in vec3 irradiance, const in vec3 clearcoatRadiance, const in vec3 geometryPosition, const in vec3 geometryNormal, const in vec3 geometryViewDir, const in vec3 geometryClearcoatNormal, const in PhysicalMaterial material, inout ReflectedLight reflectedLight) {
	#ifdef USE_CLEARCOAT
		clearcoatSpecularIndirect += clearcoatRadiance * EnvironmentBRDF( geometryClearcoatNormal, geometryViewDir, material.clearcoatF0, material.clearcoatF90, material.clearcoatRoughness );
	#endif
	#ifdef USE_SHEEN
		sheenSpecularIndirect += irradiance * material.sheenColor * IBLSheenBRDF( geometryNormal, geometryViewDir, material.sheenRoughness ) * RECIPROCAL_PI;
 	#endif
	vec3 singleScatteringDielectric = vec3( 0.0 );
	vec3 multiScatteringDielectric = vec3( 0.0 );
	vec3 singleScatteringMetallic = vec3( 0.0 );
	vec3 multiScatteringMetallic = vec3( 0.0 );
	#ifdef USE_IRIDESCENCE
		computeMultiscatteringIridescence( material.dfg, material.specularColor, material.specularF90, material.iridescence, material.iridescenceF0Dielectric, singleScatteringDielectric, multiScatteringDielectric );
		computeMultiscatteringIridescence( material.dfg, material.diffuseColor, material.specularF90, material.iridescence, material.iridescenceF0Metallic, singleScatteringMetallic, multiScatteringMetallic );
	#else
		computeMultiscattering( material.dfg, material.specularColor, material.specularF90, singleScatteringDielectric, multiScatteringDielectric );
		computeMultiscattering( material.dfg, material.diffuseColor, material.specularF90, singleScatteringMetallic, multiScatteringMetallic );
	#endif
	vec3 singleScattering = mix( singleScatteringDielectric, singleScatteringMetallic, material.metalness );
	vec3 multiScattering = mix( multiScatteringDielectric, multiScatteringMetallic, material.metalness );
	vec3 totalScatteringDielectric = singleScatteringDielectric + multiScatteringDielectric;
	#ifdef USE_DIFFUSE_ROUGHNESS
		float dotNV = saturate( dot( geometryNormal, geometryViewDir ) );
		vec3 diffuse = EON_DirectionalAlbedo( material.diffuseColor, material.diffuseRoughness, dotNV ) * ( 1.0 - material.metalness ) * ( 1.0 - totalScatteringDielectric );
	#else
		vec3 diffuse = material.diffuseContribution * ( 1.0 - totalScatteringDielectric );
	#endif
	vec3 cosineWeightedIrradiance = irradiance * RECIPROCAL_PI;
	vec3 indirectSpecular = radiance * singleScattering;
	indirectSpecular += multiScattering * cosineWeightedIrradiance;
	vec3 indirectDiffuse = diffuse * cosineWeightedIrradiance;
	#ifdef USE_SHEEN
		float sheenAlbedo = IBLSheenBRDF( geometryNormal, geometryViewDir, material.sheenRoughness );
		float sheenEnergyComp = 1.0 - max3( material.sheenColor ) * sheenAlbedo;
		indirectSpecular *= sheenEnergyComp;
		indirectDiffuse *= sheenEnergyComp;
	#endif
	reflectedLight.indirectSpecular += indirectSpecular;
	reflectedLight.indirectDiffuse += indirectDiffuse;
}
#define RE_Direct				RE_Direct_Physical
#define RE_Direct_RectArea		RE_Direct_RectArea_Physical
#define RE_IndirectDiffuse		RE_IndirectDiffuse_Physical
#define RE_IndirectSpecular		RE_IndirectSpecular_Physical
float computeSpecularOcclusion( const in float dotNV, const in float ambientOcclusion, const in float roughness ) {
	return saturate( pow( dotNV + ambientOcclusion, exp2( - 16.0 * roughness - 1.0 ) ) - 1.0 + ambientOcclusion );
}`,oy=`
vec3 geometryPosition = - vViewPosition;
vec3 geometryNormal = normal;
vec3 geometryViewDir = ( isOrthographic ) ? vec3( 0, 0, 1 ) : normalize( vViewPosition );
vec3 geometryClearcoatNormal = vec3( 0.0 );
#ifdef USE_CLEARCOAT
	geometryClearcoatNormal = clearcoatNormal;
#endif
#ifdef USE_IRIDESCENCE
	float dotNVi = saturate( dot( normal, geometryViewDir ) );
	if ( material.iridescenceThickness == 0.0 ) {
		material.iridescence = 0.0;
	} else {
		material.iridescence = saturate( material.iridescence );
	}
	if ( material.iridescence > 0.0 ) {
		vec3 iridescenceFresnelDielectric = evalIridescence( 1.0, material.iridescenceIOR, dotNVi, material.iridescenceThickness, material.specularColor );
		vec3 iridescenceFresnelMetallic = evalIridescence( 1.0, material.iridescenceIOR, dotNVi, material.iridescenceThickness, material.diffuseColor );
		material.iridescenceFresnel = mix( iridescenceFresnelDielectric, iridescenceFresnelMetallic, material.metalness );
		material.iridescenceF0Dielectric = Schlick_to_F0( iridescenceFresnelDielectric, 1.0, dotNVi );
		material.iridescenceF0Metallic = Schlick_to_F0( iridescenceFresnelMetallic, 1.0, dotNVi );
	}
#endif
#ifdef STANDARD
	float dotNVms = saturate( dot( geometryNormal, geometryViewDir ) );
	material.dfg = texture2D( dfgLUT, vec2( material.roughness, dotNVms ) ).rg;
	#if ( NUM_SUN_LIGHTS > 0 || NUM_DIR_LIGHTS > 0 || NUM_POINT_LIGHTS > 0 || NUM_SPOT_LIGHTS > 0 )
		float EssMs = material.dfg.x + material.dfg.y;
		material.multiScatteringCompensation = 1.0 + material.specularColorBlended * ( 1.0 / EssMs - 1.0 );
	#endif
#endif
IncidentLight directLight;
#if ( NUM_POINT_LIGHTS > 0 ) && defined( RE_Direct )
	PointLight pointLight;
	#if defined( USE_SHADOWMAP ) && NUM_POINT_LIGHT_SHADOWS > 0
	PointLightShadow pointLightShadow;
	#endif
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_POINT_LIGHTS; i ++ ) {
		pointLight = pointLights[ i ];
		getPointLightInfo( pointLight, geometryPosition, directLight );
		#if defined( USE_SHADOWMAP ) && ( UNROLLED_LOOP_INDEX < NUM_POINT_LIGHT_SHADOWS ) && ( defined( SHADOWMAP_TYPE_PCF ) || defined( SHADOWMAP_TYPE_BASIC ) )
		pointLightShadow = pointLightShadows[ i ];
		directLight.color *= ( directLight.visible && receiveShadow ) ? getPointShadow( pointShadowMap[ i ], pointLightShadow.shadowMapSize, pointLightShadow.shadowIntensity, pointLightShadow.shadowBias, pointLightShadow.shadowRadius, vPointShadowCoord[ i ], pointLightShadow.shadowCameraNear, pointLightShadow.shadowCameraFar ) : 1.0;
		#endif
		RE_Direct( directLight, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
	}
	#pragma unroll_loop_end
#endif
#if ( NUM_SPOT_LIGHTS > 0 ) && defined( RE_Direct )
	SpotLight spotLight;
	vec4 spotColor;
	vec3 spotLightCoord;
	bool inSpotLightMap;
	#if defined( USE_SHADOWMAP ) && NUM_SPOT_LIGHT_SHADOWS > 0
	SpotLightShadow spotLightShadow;
	#endif
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_SPOT_LIGHTS; i ++ ) {
		spotLight = spotLights[ i ];
		getSpotLightInfo( spotLight, geometryPosition, directLight );
		#if ( UNROLLED_LOOP_INDEX < NUM_SPOT_LIGHT_SHADOWS_WITH_MAPS )
		#define SPOT_LIGHT_MAP_INDEX UNROLLED_LOOP_INDEX
		#elif ( UNROLLED_LOOP_INDEX < NUM_SPOT_LIGHT_SHADOWS )
		#define SPOT_LIGHT_MAP_INDEX NUM_SPOT_LIGHT_MAPS
		#else
		#define SPOT_LIGHT_MAP_INDEX ( UNROLLED_LOOP_INDEX - NUM_SPOT_LIGHT_SHADOWS + NUM_SPOT_LIGHT_SHADOWS_WITH_MAPS )
		#endif
		#if ( SPOT_LIGHT_MAP_INDEX < NUM_SPOT_LIGHT_MAPS )
			spotLightCoord = vSpotLightCoord[ i ].xyz / vSpotLightCoord[ i ].w;
			inSpotLightMap = all( lessThan( abs( spotLightCoord * 2. - 1. ), vec3( 1.0 ) ) );
			spotColor = texture2D( spotLightMap[ SPOT_LIGHT_MAP_INDEX ], spotLightCoord.xy );
			directLight.color = inSpotLightMap ? directLight.color * spotColor.rgb : directLight.color;
		#endif
		#undef SPOT_LIGHT_MAP_INDEX
		#if defined( USE_SHADOWMAP ) && ( UNROLLED_LOOP_INDEX < NUM_SPOT_LIGHT_SHADOWS )
		spotLightShadow = spotLightShadows[ i ];
		directLight.color *= ( directLight.visible && receiveShadow ) ? getShadow( spotShadowMap[ i ], spotLightShadow.shadowMapSize, spotLightShadow.shadowIntensity, spotLightShadow.shadowBias, spotLightShadow.shadowRadius, vSpotLightCoord[ i ] ) : 1.0;
		#endif
		RE_Direct( directLight, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
	}
	#pragma unroll_loop_end
#endif
#if ( NUM_SUN_LIGHTS > 0 ) && defined( RE_Direct )
	SunLight sunLight;
	#if defined( USE_SHADOWMAP ) && NUM_SUN_LIGHT_SHADOWS > 0
	SunLightShadow sunLightShadow;
	#endif
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_SUN_LIGHTS; i ++ ) {
		sunLight = sunLights[ i ];
		getSunLightInfo( sunLight, directLight );
		#if defined( USE_SHADOWMAP ) && ( UNROLLED_LOOP_INDEX < NUM_SUN_LIGHT_SHADOWS )
		sunLightShadow = sunLightShadows[ i ];
		directLight.color *= ( directLight.visible && receiveShadow ) ? getSunShadow( sunShadowMap[ i ], sunLightShadow, UNROLLED_LOOP_INDEX ) : 1.0;
		#endif
		RE_Direct( directLight, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
	}
	#pragma unroll_loop_end
#endif
#if ( NUM_DIR_LIGHTS > 0 ) && defined( RE_Direct )
	DirectionalLight directionalLight;
	#if defined( USE_SHADOWMAP ) && NUM_DIR_LIGHT_SHADOWS > 0
	DirectionalLightShadow directionalLightShadow;
	#endif
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_DIR_LIGHTS; i ++ ) {
		directionalLight = directionalLights[ i ];
		getDirectionalLightInfo( directionalLight, directLight );
		#if defined( USE_SHADOWMAP ) && ( UNROLLED_LOOP_INDEX < NUM_DIR_LIGHT_SHADOWS )
		directionalLightShadow = directionalLightShadows[ i ];
		directLight.color *= ( directLight.visible && receiveShadow ) ? getShadow( directionalShadowMap[ i ], directionalLightShadow.shadowMapSize, directionalLightShadow.shadowIntensity, directionalLightShadow.shadowBias, directionalLightShadow.shadowRadius, vDirectionalShadowCoord[ i ] ) : 1.0;
		#endif
		RE_Direct( directLight, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
	}
	#pragma unroll_loop_end
#endif
#if ( NUM_RECT_AREA_LIGHTS > 0 ) && defined( RE_Direct_RectArea )
	RectAreaLight rectAreaLight;
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_RECT_AREA_LIGHTS; i ++ ) {
		rectAreaLight = rectAreaLights[ i ];
		RE_Direct_RectArea( rectAreaLight, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
	}
	#pragma unroll_loop_end
#endif
#if defined( RE_IndirectDiffuse )
	vec3 iblIrradiance = vec3( 0.0 );
	vec3 irradiance = getAmbientLightIrradiance( ambientLightColor );
	#if defined( USE_LIGHT_PROBES )
		irradiance += getLightProbeIrradiance( lightProbe, geometryNormal );
	#endif
	#if ( NUM_HEMI_LIGHTS > 0 )
		#pragma unroll_loop_start
		for ( int i = 0; i < NUM_HEMI_LIGHTS; i ++ ) {
			irradiance += getHemisphereLightIrradiance( hemisphereLights[ i ], geometryNormal );
		}
		#pragma unroll_loop_end
	#endif
	#if NUM_LIGHT_PROBE_GRIDS > 0
		vec3 probeWorldPos = ( ( vec4( geometryPosition, 1.0 ) - viewMatrix[ 3 ] ) * viewMatrix ).xyz;
		vec3 probeWorldNormal = transformNormalByInverseViewMatrix( geometryNormal, viewMatrix );
		int probeGrid = - 1;
		#pragma unroll_loop_start
		for ( int i = 0; i < NUM_LIGHT_PROBE_GRIDS; i ++ ) {
			if ( isInsideLightProbeGrid( probeWorldPos, probeWorldNormal, probesMin[ i ], probesMax[ i ], probesResolution[ i ] ) ) probeGrid = UNROLLED_LOOP_INDEX;
		}
		#pragma unroll_loop_end
		#pragma unroll_loop_start
		for ( int i = 0; i < NUM_LIGHT_PROBE_GRIDS; i ++ ) {
			if ( probeGrid == UNROLLED_LOOP_INDEX ) irradiance += getLightProbeGridIrradiance( probesSH[ i ], probesMin[ i ], probesMax[ i ], probesResolution[ i ], probeWorldPos, probeWorldNormal );
		}
		#pragma unroll_loop_end
	#endif
#endif
#if defined( RE_IndirectSpecular )
	vec3 radiance = vec3( 0.0 );
	vec3 clearcoatRadiance = vec3( 0.0 );
#endif`,ay=`#if defined( RE_IndirectDiffuse )
	#ifdef USE_LIGHTMAP
		vec4 lightMapTexel = texture2D( lightMap, vLightMapUv );
		vec3 lightMapIrradiance = lightMapTexel.rgb * lightMapIntensity;
		irradiance += lightMapIrradiance;
	#endif
	#if defined( USE_ENVMAP ) && defined( ENVMAP_TYPE_PMREM )
		#if defined( STANDARD ) || defined( LAMBERT ) || defined( PHONG )
			iblIrradiance += getIBLIrradiance( geometryNormal );
		#endif
	#endif
#endif
#if defined( USE_ENVMAP ) && defined( RE_IndirectSpecular )
	#ifdef USE_ANISOTROPY
		vec3 iblRadiance = getIBLAnisotropyRadiance( geometryViewDir, geometryNormal, material.roughness, material.anisotropyB, material.anisotropy );
	#else
		vec3 iblRadiance = getIBLRadiance( geometryViewDir, geometryNormal, material.roughness );
	#endif
	#ifdef USE_RETROREFLECTION
		#ifdef USE_ANISOTROPY
			vec3 retroIBLRadiance = getIBLAnisotropyRetroRadiance( geometryViewDir, geometryNormal, material.roughness, material.anisotropyB, material.anisotropy );
		#else
			vec3 retroIBLRadiance = getIBLRetroRadiance( geometryViewDir, geometryNormal, material.roughness );
		#endif
		iblRadiance = mix( iblRadiance, retroIBLRadiance, saturate( material.retroreflectivity ) );
	#endif
	radiance += iblRadiance;
	#ifdef USE_CLEARCOAT
		clearcoatRadiance += getIBLRadiance( geometryViewDir, geometryClearcoatNormal, material.clearcoatRoughness );
	#endif
#endif`,ly=`#if defined( RE_IndirectDiffuse )
	#if defined( LAMBERT ) || defined( PHONG )
		irradiance += iblIrradiance;
	#endif
	RE_IndirectDiffuse( irradiance, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
#endif
#if defined( RE_IndirectSpecular )
	RE_IndirectSpecular( radiance, iblIrradiance, clearcoatRadiance, geometryPosition, geometryNormal, geometryViewDir, geometryClearcoatNormal, material, reflectedLight );
#endif`,cy=`#if NUM_LIGHT_PROBE_GRIDS > 0
uniform highp sampler3D probesSH[ NUM_LIGHT_PROBE_GRIDS ];
uniform vec3 probesMin[ NUM_LIGHT_PROBE_GRIDS ];
uniform vec3 probesMax[ NUM_LIGHT_PROBE_GRIDS ];
uniform vec3 probesResolution[ NUM_LIGHT_PROBE_GRIDS ];
bool isInsideLightProbeGrid( vec3 worldPos, vec3 worldNormal, vec3 probesMin, vec3 probesMax, vec3 probesResolution ) {
	vec3 spacing = ( probesMax - probesMin ) / probesResolution;
	vec3 samplePos = worldPos + worldNormal * spacing * 0.5;
	vec3 margin = spacing * 0.01;
	return all( greaterThanEqual( samplePos, probesMin - margin ) ) && all( lessThanEqual( samplePos, probesMax + margin ) );
}
vec3 getLightProbeGridIrradiance( highp sampler3D probesSH, vec3 probesMin, vec3 probesMax, vec3 probesResolution, vec3 worldPos, vec3 worldNormal ) {
	vec3 res = probesResolution;
	vec3 gridRange = probesMax - probesMin;
	vec3 probeSpacing = gridRange / res;
	vec3 samplePos = worldPos + worldNormal * probeSpacing * 0.5;
	vec3 uvw = clamp( ( samplePos - probesMin ) / gridRange, 0.5 / res, 1.0 - 0.5 / res );
	float nz          = res.z;
	float paddedSlices = nz + 2.0;
	float atlasDepth  = 7.0 * paddedSlices;
	float uvZBase     = uvw.z * nz + 1.0;
	vec4 s0 = texture( probesSH, vec3( uvw.xy, ( uvZBase                       ) / atlasDepth ) );
	vec4 s1 = texture( probesSH, vec3( uvw.xy, ( uvZBase +       paddedSlices   ) / atlasDepth ) );
	vec4 s2 = texture( probesSH, vec3( uvw.xy, ( uvZBase + 2.0 * paddedSlices   ) / atlasDepth ) );
	vec4 s3 = texture( probesSH, vec3( uvw.xy, ( uvZBase + 3.0 * paddedSlices   ) / atlasDepth ) );
	vec4 s4 = texture( probesSH, vec3( uvw.xy, ( uvZBase + 4.0 * paddedSlices   ) / atlasDepth ) );
	vec4 s5 = texture( probesSH, vec3( uvw.xy, ( uvZBase + 5.0 * paddedSlices   ) / atlasDepth ) );
	vec4 s6 = texture( probesSH, vec3( uvw.xy, ( uvZBase + 6.0 * paddedSlices   ) / atlasDepth ) );
	vec3 c0 = s0.xyz;
	vec3 c1 = vec3( s0.w, s1.xy );
	vec3 c2 = vec3( s1.zw, s2.x );
	vec3 c3 = s2.yzw;
	vec3 c4 = s3.xyz;
	vec3 c5 = vec3( s3.w, s4.xy );
	vec3 c6 = vec3( s4.zw, s5.x );
	vec3 c7 = s5.yzw;
	vec3 c8 = s6.xyz;
	float x = worldNormal.x, y = worldNormal.y, z = worldNormal.z;
	vec3 result = c0 * 0.886227;
	result += c1 * 2.0 * 0.511664 * y;
	result += c2 * 2.0 * 0.511664 * z;
	result += c3 * 2.0 * 0.511664 * x;
	result += c4 * 2.0 * 0.429043 * x * y;
	result += c5 * 2.0 * 0.429043 * y * z;
	result += c6 * ( 0.743125 * z * z - 0.247708 );
	result += c7 * 2.0 * 0.429043 * x * z;
	result += c8 * 0.429043 * ( x * x - y * y );
	return max( result, vec3( 0.0 ) );
}
#endif`,hy=`#if defined( USE_LOGARITHMIC_DEPTH_BUFFER )
	gl_FragDepth = vIsPerspective == 0.0 ? gl_FragCoord.z : log2( vFragDepth ) * logDepthBufFC * 0.5;
#endif`,uy=`#if defined( USE_LOGARITHMIC_DEPTH_BUFFER )
	uniform float logDepthBufFC;
	varying float vFragDepth;
	varying float vIsPerspective;
#endif`,fy=`#ifdef USE_LOGARITHMIC_DEPTH_BUFFER
	varying float vFragDepth;
	varying float vIsPerspective;
#endif`,dy=`#ifdef USE_LOGARITHMIC_DEPTH_BUFFER
	vFragDepth = 1.0 + gl_Position.w;
	vIsPerspective = float( isPerspectiveMatrix( projectionMatrix ) );
#endif`,py=`#ifdef USE_MAP
	vec4 sampledDiffuseColor = texture2D( map, vMapUv );
	#ifdef DECODE_VIDEO_TEXTURE
		sampledDiffuseColor = sRGBTransferEOTF( sampledDiffuseColor );
	#endif
	diffuseColor *= sampledDiffuseColor;
#endif`,my=`#ifdef USE_MAP
	uniform sampler2D map;
#endif`,gy=`#if defined( USE_MAP ) || defined( USE_ALPHAMAP )
	#if defined( USE_POINTS_UV )
		vec2 uv = vUv;
	#else
		vec2 uv = ( uvTransform * vec3( gl_PointCoord.x, 1.0 - gl_PointCoord.y, 1 ) ).xy;
	#endif
#endif
#ifdef USE_MAP
	diffuseColor *= texture2D( map, uv );
#endif
#ifdef USE_ALPHAMAP
	diffuseColor.a *= texture2D( alphaMap, uv ).g;
#endif`,_y=`#if defined( USE_POINTS_UV )
	varying vec2 vUv;
#else
	#if defined( USE_MAP ) || defined( USE_ALPHAMAP )
		uniform mat3 uvTransform;
	#endif
#endif
#ifdef USE_MAP
	uniform sampler2D map;
#endif
#ifdef USE_ALPHAMAP
	uniform sampler2D alphaMap;
#endif`,xy=`float metalnessFactor = metalness;
#ifdef USE_METALNESSMAP
	vec4 texelMetalness = texture2D( metalnessMap, vMetalnessMapUv );
	metalnessFactor *= texelMetalness.b;
#endif`,yy=`#ifdef USE_METALNESSMAP
	uniform sampler2D metalnessMap;
#endif`,vy=`#ifdef USE_INSTANCING_MORPH
	float morphTargetInfluences[ MORPHTARGETS_COUNT ];
	float morphTargetBaseInfluence = texelFetch( morphTexture, ivec2( 0, gl_InstanceID ), 0 ).r;
	for ( int i = 0; i < MORPHTARGETS_COUNT; i ++ ) {
		morphTargetInfluences[i] =  texelFetch( morphTexture, ivec2( i + 1, gl_InstanceID ), 0 ).r;
	}
#endif`,Sy=`#if defined( USE_MORPHCOLORS )
	#if defined( USE_COLOR_ALPHA )
		vColor *= morphTargetBaseInfluence;
	#elif defined( USE_COLOR )
		vColor.rgb *= morphTargetBaseInfluence;
	#endif
	for ( int i = 0; i < MORPHTARGETS_COUNT; i ++ ) {
		#if defined( USE_COLOR_ALPHA )
			if ( morphTargetInfluences[ i ] != 0.0 ) vColor += getMorph( gl_VertexID, i, 2 ) * morphTargetInfluences[ i ];
		#elif defined( USE_COLOR )
			if ( morphTargetInfluences[ i ] != 0.0 ) vColor.rgb += getMorph( gl_VertexID, i, 2 ).rgb * morphTargetInfluences[ i ];
		#endif
	}
#endif`,My=`#ifdef USE_MORPHNORMALS
	objectNormal *= morphTargetBaseInfluence;
	for ( int i = 0; i < MORPHTARGETS_COUNT; i ++ ) {
		if ( morphTargetInfluences[ i ] != 0.0 ) objectNormal += getMorph( gl_VertexID, i, 1 ).xyz * morphTargetInfluences[ i ];
	}
#endif`,by=`#ifdef USE_MORPHTARGETS
	#ifndef USE_INSTANCING_MORPH
		uniform float morphTargetBaseInfluence;
		uniform float morphTargetInfluences[ MORPHTARGETS_COUNT ];
	#endif
	uniform sampler2DArray morphTargetsTexture;
	uniform ivec2 morphTargetsTextureSize;
	vec4 getMorph( const in int vertexIndex, const in int morphTargetIndex, const in int offset ) {
		int texelIndex = vertexIndex * MORPHTARGETS_TEXTURE_STRIDE + offset;
		int y = texelIndex / morphTargetsTextureSize.x;
		int x = texelIndex - y * morphTargetsTextureSize.x;
		ivec3 morphUV = ivec3( x, y, morphTargetIndex );
		return texelFetch( morphTargetsTexture, morphUV, 0 );
	}
#endif`,wy=`#ifdef USE_MORPHTARGETS
	transformed *= morphTargetBaseInfluence;
	for ( int i = 0; i < MORPHTARGETS_COUNT; i ++ ) {
		if ( morphTargetInfluences[ i ] != 0.0 ) transformed += getMorph( gl_VertexID, i, 0 ).xyz * morphTargetInfluences[ i ];
	}
#endif`,Ey=`float faceDirection = gl_FrontFacing ? 1.0 : - 1.0;
#ifdef FLAT_SHADED
	vec3 fdx = dFdx( vViewPosition );
	vec3 fdy = dFdy( vViewPosition );
	vec3 normal = normalize( cross( fdx, fdy ) );
#else
	vec3 normal = normalize( vNormal );
	#ifdef DOUBLE_SIDED
		normal *= faceDirection;
	#endif
#endif
#if defined( USE_NORMALMAP_TANGENTSPACE ) || defined( USE_CLEARCOAT_NORMALMAP ) || defined( USE_ANISOTROPY )
	#ifdef USE_TANGENT
		mat3 tbn = mat3( normalize( vTangent ), normalize( vBitangent ), normal );
	#else
		mat3 tbn = getTangentFrame( - vViewPosition, normal,
		#if defined( USE_NORMALMAP )
			vNormalMapUv
		#elif defined( USE_CLEARCOAT_NORMALMAP )
			vClearcoatNormalMapUv
		#else
			vUv
		#endif
		);
	#endif
	#ifdef DOUBLE_SIDED
		tbn[0] *= faceDirection;
		tbn[1] *= faceDirection;
	#endif
#endif
#ifdef USE_CLEARCOAT_NORMALMAP
	#ifdef USE_TANGENT
		mat3 tbn2 = mat3( normalize( vTangent ), normalize( vBitangent ), normal );
	#else
		mat3 tbn2 = getTangentFrame( - vViewPosition, normal, vClearcoatNormalMapUv );
	#endif
	#ifdef DOUBLE_SIDED
		tbn2[0] *= faceDirection;
		tbn2[1] *= faceDirection;
	#endif
#endif
vec3 nonPerturbedNormal = normal;`,Ty=`#ifdef USE_NORMALMAP_OBJECTSPACE
	normal = texture2D( normalMap, vNormalMapUv ).xyz * 2.0 - 1.0;
	#ifdef FLIP_SIDED
		normal = - normal;
	#endif
	#ifdef DOUBLE_SIDED
		normal = normal * faceDirection;
	#endif
	normal = normalize( normalMatrix * normal );
#elif defined( USE_NORMALMAP_TANGENTSPACE )
	vec3 mapN = texture2D( normalMap, vNormalMapUv ).xyz * 2.0 - 1.0;
	#if defined( USE_PACKED_NORMALMAP )
		mapN = vec3( mapN.xy, sqrt( saturate( 1.0 - dot( mapN.xy, mapN.xy ) ) ) );
	#endif
	mapN.xy *= normalScale;
	normal = normalize( tbn * mapN );
#elif defined( USE_BUMPMAP )
	normal = perturbNormalArb( - vViewPosition, normal, dHdxy_fwd(), faceDirection );
#endif`,Ay=`#ifndef FLAT_SHADED
	varying vec3 vNormal;
	#ifdef USE_TANGENT
		varying vec3 vTangent;
		varying vec3 vBitangent;
	#endif
#endif`,Ry=`#ifndef FLAT_SHADED
	varying vec3 vNormal;
	#ifdef USE_TANGENT
		varying vec3 vTangent;
		varying vec3 vBitangent;
	#endif
#endif`,Cy=`#ifndef FLAT_SHADED
	vNormal = normalize( transformedNormal );
	#ifdef USE_TANGENT
		vTangent = normalize( transformedTangent );
		vBitangent = normalize( cross( vNormal, vTangent ) * tangent.w );
		#ifdef FLIP_SIDED
			vBitangent = - vBitangent;
		#endif
	#endif
#endif`,Py=`#ifdef USE_NORMALMAP
	uniform sampler2D normalMap;
	uniform vec2 normalScale;
#endif
#ifdef USE_NORMALMAP_OBJECTSPACE
	uniform mat3 normalMatrix;
#endif
#if ! defined ( USE_TANGENT ) && ( defined ( USE_NORMALMAP_TANGENTSPACE ) || defined ( USE_CLEARCOAT_NORMALMAP ) || defined( USE_ANISOTROPY ) )
	mat3 getTangentFrame( vec3 eye_pos, vec3 surf_norm, vec2 uv ) {
		vec3 q0 = dFdx( eye_pos.xyz );
		vec3 q1 = dFdy( eye_pos.xyz );
		vec2 st0 = dFdx( uv.st );
		vec2 st1 = dFdy( uv.st );
		vec3 N = surf_norm;
		vec3 q1perp = cross( q1, N );
		vec3 q0perp = cross( N, q0 );
		vec3 T = q1perp * st0.x + q0perp * st1.x;
		vec3 B = q1perp * st0.y + q0perp * st1.y;
		float det = max( dot( T, T ), dot( B, B ) );
		float scale = ( det == 0.0 ) ? 0.0 : inversesqrt( det );
		return mat3( T * scale, B * scale, N );
	}
#endif`,Iy=`#ifdef USE_CLEARCOAT
	vec3 clearcoatNormal = nonPerturbedNormal;
#endif`,Ly=`#ifdef USE_CLEARCOAT_NORMALMAP
	vec3 clearcoatMapN = texture2D( clearcoatNormalMap, vClearcoatNormalMapUv ).xyz * 2.0 - 1.0;
	clearcoatMapN.xy *= clearcoatNormalScale;
	clearcoatNormal = normalize( tbn2 * clearcoatMapN );
#endif`,Dy=`#ifdef USE_CLEARCOATMAP
	uniform sampler2D clearcoatMap;
#endif
#ifdef USE_CLEARCOAT_NORMALMAP
	uniform sampler2D clearcoatNormalMap;
	uniform vec2 clearcoatNormalScale;
#endif
#ifdef USE_CLEARCOAT_ROUGHNESSMAP
	uniform sampler2D clearcoatRoughnessMap;
#endif`,Ny=`#ifdef USE_IRIDESCENCEMAP
	uniform sampler2D iridescenceMap;
#endif
#ifdef USE_IRIDESCENCE_THICKNESSMAP
	uniform sampler2D iridescenceThicknessMap;
#endif`,Uy=`#ifdef OPAQUE
diffuseColor.a = 1.0;
#endif
#ifdef USE_TRANSMISSION
diffuseColor.a *= material.transmissionAlpha;
#endif
gl_FragColor = vec4( outgoingLight, diffuseColor.a );`,Fy=`vec3 packNormalToRGB( const in vec3 normal ) {
	return normalize( normal ) * 0.5 + 0.5;
}
vec3 unpackRGBToNormal( const in vec3 rgb ) {
	return 2.0 * rgb.xyz - 1.0;
}
const float PackUpscale = 256. / 255.;const float UnpackDownscale = 255. / 256.;const float ShiftRight8 = 1. / 256.;
const float Inv255 = 1. / 255.;
const vec4 PackFactors = vec4( 1.0, 256.0, 256.0 * 256.0, 256.0 * 256.0 * 256.0 );
const vec2 UnpackFactors2 = vec2( UnpackDownscale, 1.0 / PackFactors.g );
const vec3 UnpackFactors3 = vec3( UnpackDownscale / PackFactors.rg, 1.0 / PackFactors.b );
const vec4 UnpackFactors4 = vec4( UnpackDownscale / PackFactors.rgb, 1.0 / PackFactors.a );
vec4 packDepthToRGBA( const in float v ) {
	if( v <= 0.0 )
		return vec4( 0., 0., 0., 0. );
	if( v >= 1.0 )
		return vec4( 1., 1., 1., 1. );
	float vuf;
	float af = modf( v * PackFactors.a, vuf );
	float bf = modf( vuf * ShiftRight8, vuf );
	float gf = modf( vuf * ShiftRight8, vuf );
	return vec4( vuf * Inv255, gf * PackUpscale, bf * PackUpscale, af );
}
vec3 packDepthToRGB( const in float v ) {
	if( v <= 0.0 )
		return vec3( 0., 0., 0. );
	if( v >= 1.0 )
		return vec3( 1., 1., 1. );
	float vuf;
	float bf = modf( v * PackFactors.b, vuf );
	float gf = modf( vuf * ShiftRight8, vuf );
	return vec3( vuf * Inv255, gf * PackUpscale, bf );
}
vec2 packDepthToRG( const in float v ) {
	if( v <= 0.0 )
		return vec2( 0., 0. );
	if( v >= 1.0 )
		return vec2( 1., 1. );
	float vuf;
	float gf = modf( v * 256., vuf );
	return vec2( vuf * Inv255, gf );
}
float unpackRGBAToDepth( const in vec4 v ) {
	return dot( v, UnpackFactors4 );
}
float unpackRGBToDepth( const in vec3 v ) {
	return dot( v, UnpackFactors3 );
}
float unpackRGToDepth( const in vec2 v ) {
	return v.r * UnpackFactors2.r + v.g * UnpackFactors2.g;
}
vec4 pack2HalfToRGBA( const in vec2 v ) {
	vec4 r = vec4( v.x, fract( v.x * 255.0 ), v.y, fract( v.y * 255.0 ) );
	return vec4( r.x - r.y / 255.0, r.y, r.z - r.w / 255.0, r.w );
}
vec2 unpackRGBATo2Half( const in vec4 v ) {
	return vec2( v.x + ( v.y / 255.0 ), v.z + ( v.w / 255.0 ) );
}
float viewZToOrthographicDepth( const in float viewZ, const in float near, const in float far ) {
	return ( viewZ + near ) / ( near - far );
}
float orthographicDepthToViewZ( const in float depth, const in float near, const in float far ) {
	#ifdef USE_REVERSED_DEPTH_BUFFER
	
		return depth * ( far - near ) - far;
	#else
		return depth * ( near - far ) - near;
	#endif
}
float viewZToPerspectiveDepth( const in float viewZ, const in float near, const in float far ) {
	return ( ( near + viewZ ) * far ) / ( ( far - near ) * viewZ );
}
float perspectiveDepthToViewZ( const in float depth, const in float near, const in float far ) {
	
	#ifdef USE_REVERSED_DEPTH_BUFFER
		return ( near * far ) / ( ( near - far ) * depth - near );
	#else
		return ( near * far ) / ( ( far - near ) * depth - far );
	#endif
}`,Oy=`#ifdef PREMULTIPLIED_ALPHA
	gl_FragColor.rgb *= gl_FragColor.a;
#endif`,By=`vec4 mvPosition = vec4( transformed, 1.0 );
#ifdef USE_BATCHING
	mvPosition = batchingMatrix * mvPosition;
#endif
#ifdef USE_INSTANCING
	mvPosition = instanceMatrix * mvPosition;
#endif
mvPosition = modelViewMatrix * mvPosition;
gl_Position = projectionMatrix * mvPosition;`,ky=`#ifdef DITHERING
	gl_FragColor.rgb = dithering( gl_FragColor.rgb );
#endif`,zy=`#ifdef DITHERING
	vec3 dithering( vec3 color ) {
		float grid_position = rand( gl_FragCoord.xy );
		vec3 dither_shift_RGB = vec3( 0.25 / 255.0, -0.25 / 255.0, 0.25 / 255.0 );
		dither_shift_RGB = mix( 2.0 * dither_shift_RGB, -2.0 * dither_shift_RGB, grid_position );
		return color + dither_shift_RGB;
	}
#endif`,Vy=`float roughnessFactor = roughness;
#ifdef USE_ROUGHNESSMAP
	vec4 texelRoughness = texture2D( roughnessMap, vRoughnessMapUv );
	roughnessFactor *= texelRoughness.g;
#endif`,Gy=`#ifdef USE_ROUGHNESSMAP
	uniform sampler2D roughnessMap;
#endif`,Hy=`#if NUM_SPOT_LIGHT_COORDS > 0
	varying vec4 vSpotLightCoord[ NUM_SPOT_LIGHT_COORDS ];
#endif
#if NUM_SPOT_LIGHT_MAPS > 0
	uniform sampler2D spotLightMap[ NUM_SPOT_LIGHT_MAPS ];
#endif
#ifdef USE_SHADOWMAP
	#if NUM_SUN_LIGHT_SHADOWS > 0
		#define SUN_LIGHT_CASCADES 2
		#if defined( SHADOWMAP_TYPE_PCF )
			uniform sampler2DShadow sunShadowMap[ NUM_SUN_LIGHT_SHADOWS ];
		#else
			uniform sampler2D sunShadowMap[ NUM_SUN_LIGHT_SHADOWS ];
		#endif
		uniform mat4 sunShadowMatrix[ NUM_SUN_LIGHT_SHADOWS * SUN_LIGHT_CASCADES ];
		uniform vec4 sunShadowCascade[ NUM_SUN_LIGHT_SHADOWS * SUN_LIGHT_CASCADES ];
		varying vec4 vSunShadowWorldPosition;
		varying vec3 vSunShadowWorldNormal;
		struct SunLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
		};
		uniform SunLightShadow sunLightShadows[ NUM_SUN_LIGHT_SHADOWS ];
	#endif
	#if NUM_DIR_LIGHT_SHADOWS > 0
		#if defined( SHADOWMAP_TYPE_PCF )
			uniform sampler2DShadow directionalShadowMap[ NUM_DIR_LIGHT_SHADOWS ];
		#else
			uniform sampler2D directionalShadowMap[ NUM_DIR_LIGHT_SHADOWS ];
		#endif
		varying vec4 vDirectionalShadowCoord[ NUM_DIR_LIGHT_SHADOWS ];
		struct DirectionalLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
		};
		uniform DirectionalLightShadow directionalLightShadows[ NUM_DIR_LIGHT_SHADOWS ];
	#endif
	#if NUM_SPOT_LIGHT_SHADOWS > 0
		#if defined( SHADOWMAP_TYPE_PCF )
			uniform sampler2DShadow spotShadowMap[ NUM_SPOT_LIGHT_SHADOWS ];
		#else
			uniform sampler2D spotShadowMap[ NUM_SPOT_LIGHT_SHADOWS ];
		#endif
		struct SpotLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
		};
		uniform SpotLightShadow spotLightShadows[ NUM_SPOT_LIGHT_SHADOWS ];
	#endif
	#if NUM_POINT_LIGHT_SHADOWS > 0
		#if defined( SHADOWMAP_TYPE_PCF )
			uniform samplerCubeShadow pointShadowMap[ NUM_POINT_LIGHT_SHADOWS ];
		#elif defined( SHADOWMAP_TYPE_BASIC )
			uniform samplerCube pointShadowMap[ NUM_POINT_LIGHT_SHADOWS ];
		#endif
		varying vec4 vPointShadowCoord[ NUM_POINT_LIGHT_SHADOWS ];
		struct PointLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
			float shadowCameraNear;
			float shadowCameraFar;
		};
		uniform PointLightShadow pointLightShadows[ NUM_POINT_LIGHT_SHADOWS ];
	#endif
	#if defined( SHADOWMAP_TYPE_PCF )
		float interleavedGradientNoise( vec2 position ) {
			return fract( 52.9829189 * fract( dot( position, vec2( 0.06711056, 0.00583715 ) ) ) );
		}
		vec2 vogelDiskSample( int sampleIndex, int samplesCount, float phi ) {
			const float goldenAngle = 2.399963229728653;
			float r = sqrt( ( float( sampleIndex ) + 0.5 ) / float( samplesCount ) );
			float theta = float( sampleIndex ) * goldenAngle + phi;
			return vec2( cos( theta ), sin( theta ) ) * r;
		}
	#endif
	#if defined( SHADOWMAP_TYPE_PCF )
		float getShadow( sampler2DShadow shadowMap, vec2 shadowMapSize, float shadowIntensity, float shadowBias, float shadowRadius, vec4 shadowCoord ) {
			float shadow = 1.0;
			shadowCoord.xyz /= shadowCoord.w;
			#ifdef USE_REVERSED_DEPTH_BUFFER
				shadowCoord.z -= shadowBias;
			#else
				shadowCoord.z += shadowBias;
			#endif
			bool inFrustum = shadowCoord.x >= 0.0 && shadowCoord.x <= 1.0 && shadowCoord.y >= 0.0 && shadowCoord.y <= 1.0;
			bool frustumTest = inFrustum && shadowCoord.z <= 1.0;
			if ( frustumTest ) {
				vec2 texelSize = vec2( 1.0 ) / shadowMapSize;
				vec2 radius = shadowRadius * texelSize;
				float phi = interleavedGradientNoise( gl_FragCoord.xy ) * PI2;
				shadow = (
					texture( shadowMap, vec3( shadowCoord.xy + vogelDiskSample( 0, 5, phi ) * radius, shadowCoord.z ) ) +
					texture( shadowMap, vec3( shadowCoord.xy + vogelDiskSample( 1, 5, phi ) * radius, shadowCoord.z ) ) +
					texture( shadowMap, vec3( shadowCoord.xy + vogelDiskSample( 2, 5, phi ) * radius, shadowCoord.z ) ) +
					texture( shadowMap, vec3( shadowCoord.xy + vogelDiskSample( 3, 5, phi ) * radius, shadowCoord.z ) ) +
					texture( shadowMap, vec3( shadowCoord.xy + vogelDiskSample( 4, 5, phi ) * radius, shadowCoord.z ) )
				) * 0.2;
			}
			return mix( 1.0, shadow, shadowIntensity );
		}
	#elif defined( SHADOWMAP_TYPE_VSM )
		float getShadow( sampler2D shadowMap, vec2 shadowMapSize, float shadowIntensity, float shadowBias, float shadowRadius, vec4 shadowCoord ) {
			float shadow = 1.0;
			shadowCoord.xyz /= shadowCoord.w;
			#ifdef USE_REVERSED_DEPTH_BUFFER
				shadowCoord.z -= shadowBias;
			#else
				shadowCoord.z += shadowBias;
			#endif
			bool inFrustum = shadowCoord.x >= 0.0 && shadowCoord.x <= 1.0 && shadowCoord.y >= 0.0 && shadowCoord.y <= 1.0;
			bool frustumTest = inFrustum && shadowCoord.z <= 1.0;
			if ( frustumTest ) {
				vec2 distribution = texture2D( shadowMap, shadowCoord.xy ).rg;
				float mean = distribution.x;
				float variance = distribution.y * distribution.y;
				#ifdef USE_REVERSED_DEPTH_BUFFER
					float hard_shadow = step( mean, shadowCoord.z );
				#else
					float hard_shadow = step( shadowCoord.z, mean );
				#endif
				
				if ( hard_shadow == 1.0 ) {
					shadow = 1.0;
				} else {
					variance = max( variance, 0.0000001 );
					float d = shadowCoord.z - mean;
					float p_max = variance / ( variance + d * d );
					p_max = clamp( ( p_max - 0.3 ) / 0.65, 0.0, 1.0 );
					shadow = max( hard_shadow, p_max );
				}
			}
			return mix( 1.0, shadow, shadowIntensity );
		}
	#else
		float getShadow( sampler2D shadowMap, vec2 shadowMapSize, float shadowIntensity, float shadowBias, float shadowRadius, vec4 shadowCoord ) {
			float shadow = 1.0;
			shadowCoord.xyz /= shadowCoord.w;
			#ifdef USE_REVERSED_DEPTH_BUFFER
				shadowCoord.z -= shadowBias;
			#else
				shadowCoord.z += shadowBias;
			#endif
			bool inFrustum = shadowCoord.x >= 0.0 && shadowCoord.x <= 1.0 && shadowCoord.y >= 0.0 && shadowCoord.y <= 1.0;
			bool frustumTest = inFrustum && shadowCoord.z <= 1.0;
			if ( frustumTest ) {
				float depth = texture2D( shadowMap, shadowCoord.xy ).r;
				#ifdef USE_REVERSED_DEPTH_BUFFER
					shadow = step( depth, shadowCoord.z );
				#else
					shadow = step( shadowCoord.z, depth );
				#endif
			}
			return mix( 1.0, shadow, shadowIntensity );
		}
	#endif
	#if NUM_SUN_LIGHT_SHADOWS > 0
		float getSunShadow(
			#if defined( SHADOWMAP_TYPE_PCF )
				sampler2DShadow shadowMap,
			#else
				sampler2D shadowMap,
			#endif
			SunLightShadow sunLightShadow,
			int shadowIndex
		) {
			vec4 shadowWorldPosition = vec4( vSunShadowWorldPosition.xyz + vSunShadowWorldNormal * sunLightShadow.shadowNormalBias, 1.0 );
			float viewDepth = vSunShadowWorldPosition.w;
			int cascadeOffset = shadowIndex * SUN_LIGHT_CASCADES;
			float shadow = 1.0;
			for ( int i = SUN_LIGHT_CASCADES - 1; i >= 0; i -- ) {
				vec4 cascade = sunShadowCascade[ cascadeOffset + i ];
				if ( viewDepth >= cascade.x && viewDepth < cascade.y ) {
					float cascadeShadow = getShadow(
						shadowMap,
						sunLightShadow.shadowMapSize,
						sunLightShadow.shadowIntensity,
						sunLightShadow.shadowBias,
						sunLightShadow.shadowRadius,
						sunShadowMatrix[ cascadeOffset + i ] * shadowWorldPosition
					);
					shadow = mix( cascadeShadow, shadow, smoothstep( cascade.z, cascade.y, viewDepth ) );
				}
			}
			return shadow;
		}
	#endif
	#if NUM_POINT_LIGHT_SHADOWS > 0
	#if defined( SHADOWMAP_TYPE_PCF )
	float getPointShadow( samplerCubeShadow shadowMap, vec2 shadowMapSize, float shadowIntensity, float shadowBias, float shadowRadius, vec4 shadowCoord, float shadowCameraNear, float shadowCameraFar ) {
		float shadow = 1.0;
		vec3 lightToPosition = shadowCoord.xyz;
		vec3 bd3D = normalize( lightToPosition );
		vec3 absVec = abs( lightToPosition );
		float viewSpaceZ = max( max( absVec.x, absVec.y ), absVec.z );
		if ( viewSpaceZ - shadowCameraFar <= 0.0 && viewSpaceZ - shadowCameraNear >= 0.0 ) {
			float lightDistance = length( lightToPosition );
			float depthRange = shadowCameraFar - shadowCameraNear;
			#ifdef USE_REVERSED_DEPTH_BUFFER
				float depthA = - shadowCameraNear / depthRange - shadowBias;
				float depthB = shadowCameraNear * shadowCameraFar / ( depthRange * lightDistance );
			#else
				float depthA = shadowCameraFar / depthRange + shadowBias;
				float depthB = - shadowCameraNear * shadowCameraFar / ( depthRange * lightDistance );
			#endif
			float texelSize = shadowRadius / shadowMapSize.x;
			vec3 absDir = abs( bd3D );
			vec3 tangent = absDir.x > absDir.z ? vec3( 0.0, 1.0, 0.0 ) : vec3( 1.0, 0.0, 0.0 );
			tangent = normalize( cross( bd3D, tangent ) );
			vec3 bitangent = cross( bd3D, tangent );
			float phi = interleavedGradientNoise( gl_FragCoord.xy ) * PI2;
			shadow = 0.0;
			for ( int i = 0; i < 5; i ++ ) {
				vec2 offset = vogelDiskSample( i, 5, phi );
				vec3 direction = bd3D + ( tangent * offset.x + bitangent * offset.y ) * texelSize;
				vec3 absDirection = abs( direction );
				float dp = depthA + depthB / max( max( absDirection.x, absDirection.y ), absDirection.z );
				shadow += texture( shadowMap, vec4( direction, dp ) );
			}
			shadow *= 0.2;
		}
		return mix( 1.0, shadow, shadowIntensity );
	}
	#elif defined( SHADOWMAP_TYPE_BASIC )
	float getPointShadow( samplerCube shadowMap, vec2 shadowMapSize, float shadowIntensity, float shadowBias, float shadowRadius, vec4 shadowCoord, float shadowCameraNear, float shadowCameraFar ) {
		float shadow = 1.0;
		vec3 lightToPosition = shadowCoord.xyz;
		vec3 absVec = abs( lightToPosition );
		float viewSpaceZ = max( max( absVec.x, absVec.y ), absVec.z );
		if ( viewSpaceZ - shadowCameraFar <= 0.0 && viewSpaceZ - shadowCameraNear >= 0.0 ) {
			float dp = ( shadowCameraFar * ( viewSpaceZ - shadowCameraNear ) ) / ( viewSpaceZ * ( shadowCameraFar - shadowCameraNear ) );
			dp += shadowBias;
			vec3 bd3D = normalize( lightToPosition );
			float depth = textureCube( shadowMap, bd3D ).r;
			#ifdef USE_REVERSED_DEPTH_BUFFER
				depth = 1.0 - depth;
			#endif
			shadow = step( dp, depth );
		}
		return mix( 1.0, shadow, shadowIntensity );
	}
	#endif
	#endif
#endif`,Wy=`#if NUM_SPOT_LIGHT_COORDS > 0
	uniform mat4 spotLightMatrix[ NUM_SPOT_LIGHT_COORDS ];
	varying vec4 vSpotLightCoord[ NUM_SPOT_LIGHT_COORDS ];
#endif
#ifdef USE_SHADOWMAP
	#if NUM_SUN_LIGHT_SHADOWS > 0
		varying vec4 vSunShadowWorldPosition;
		varying vec3 vSunShadowWorldNormal;
	#endif
	#if NUM_DIR_LIGHT_SHADOWS > 0
		uniform mat4 directionalShadowMatrix[ NUM_DIR_LIGHT_SHADOWS ];
		varying vec4 vDirectionalShadowCoord[ NUM_DIR_LIGHT_SHADOWS ];
		struct DirectionalLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
		};
		uniform DirectionalLightShadow directionalLightShadows[ NUM_DIR_LIGHT_SHADOWS ];
	#endif
	#if NUM_SPOT_LIGHT_SHADOWS > 0
		struct SpotLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
		};
		uniform SpotLightShadow spotLightShadows[ NUM_SPOT_LIGHT_SHADOWS ];
	#endif
	#if NUM_POINT_LIGHT_SHADOWS > 0
		uniform mat4 pointShadowMatrix[ NUM_POINT_LIGHT_SHADOWS ];
		varying vec4 vPointShadowCoord[ NUM_POINT_LIGHT_SHADOWS ];
		struct PointLightShadow {
			float shadowIntensity;
			float shadowBias;
			float shadowNormalBias;
			float shadowRadius;
			vec2 shadowMapSize;
			float shadowCameraNear;
			float shadowCameraFar;
		};
		uniform PointLightShadow pointLightShadows[ NUM_POINT_LIGHT_SHADOWS ];
	#endif
#endif`,Xy=`#if ( defined( USE_SHADOWMAP ) && ( NUM_DIR_LIGHT_SHADOWS > 0 || NUM_SUN_LIGHT_SHADOWS > 0 || NUM_POINT_LIGHT_SHADOWS > 0 ) ) || ( NUM_SPOT_LIGHT_COORDS > 0 )
	#ifdef HAS_NORMAL
		vec3 shadowWorldNormal = transformNormalByInverseViewMatrix( transformedNormal, viewMatrix );
	#else
		vec3 shadowWorldNormal = vec3( 0.0 );
	#endif
	vec4 shadowWorldPosition;
#endif
#if defined( USE_SHADOWMAP )
	#if NUM_SUN_LIGHT_SHADOWS > 0
		vSunShadowWorldPosition = vec4( worldPosition.xyz, - mvPosition.z );
		vSunShadowWorldNormal = shadowWorldNormal;
	#endif
	#if NUM_DIR_LIGHT_SHADOWS > 0
		#pragma unroll_loop_start
		for ( int i = 0; i < NUM_DIR_LIGHT_SHADOWS; i ++ ) {
			shadowWorldPosition = worldPosition + vec4( shadowWorldNormal * directionalLightShadows[ i ].shadowNormalBias, 0 );
			vDirectionalShadowCoord[ i ] = directionalShadowMatrix[ i ] * shadowWorldPosition;
		}
		#pragma unroll_loop_end
	#endif
	#if NUM_POINT_LIGHT_SHADOWS > 0
		#pragma unroll_loop_start
		for ( int i = 0; i < NUM_POINT_LIGHT_SHADOWS; i ++ ) {
			shadowWorldPosition = worldPosition + vec4( shadowWorldNormal * pointLightShadows[ i ].shadowNormalBias, 0 );
			vPointShadowCoord[ i ] = pointShadowMatrix[ i ] * shadowWorldPosition;
		}
		#pragma unroll_loop_end
	#endif
#endif
#if NUM_SPOT_LIGHT_COORDS > 0
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_SPOT_LIGHT_COORDS; i ++ ) {
		shadowWorldPosition = worldPosition;
		#if ( defined( USE_SHADOWMAP ) && UNROLLED_LOOP_INDEX < NUM_SPOT_LIGHT_SHADOWS )
			shadowWorldPosition.xyz += shadowWorldNormal * spotLightShadows[ i ].shadowNormalBias;
		#endif
		vSpotLightCoord[ i ] = spotLightMatrix[ i ] * shadowWorldPosition;
	}
	#pragma unroll_loop_end
#endif`,qy=`float getShadowMask() {
	float shadow = 1.0;
	#ifdef USE_SHADOWMAP
	#if NUM_SUN_LIGHT_SHADOWS > 0
	SunLightShadow sunLight;
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_SUN_LIGHT_SHADOWS; i ++ ) {
		sunLight = sunLightShadows[ i ];
		shadow *= receiveShadow ? getSunShadow( sunShadowMap[ i ], sunLight, UNROLLED_LOOP_INDEX ) : 1.0;
	}
	#pragma unroll_loop_end
	#endif
	#if NUM_DIR_LIGHT_SHADOWS > 0
	DirectionalLightShadow directionalLight;
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_DIR_LIGHT_SHADOWS; i ++ ) {
		directionalLight = directionalLightShadows[ i ];
		shadow *= receiveShadow ? getShadow( directionalShadowMap[ i ], directionalLight.shadowMapSize, directionalLight.shadowIntensity, directionalLight.shadowBias, directionalLight.shadowRadius, vDirectionalShadowCoord[ i ] ) : 1.0;
	}
	#pragma unroll_loop_end
	#endif
	#if NUM_SPOT_LIGHT_SHADOWS > 0
	SpotLightShadow spotLight;
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_SPOT_LIGHT_SHADOWS; i ++ ) {
		spotLight = spotLightShadows[ i ];
		shadow *= receiveShadow ? getShadow( spotShadowMap[ i ], spotLight.shadowMapSize, spotLight.shadowIntensity, spotLight.shadowBias, spotLight.shadowRadius, vSpotLightCoord[ i ] ) : 1.0;
	}
	#pragma unroll_loop_end
	#endif
	#if NUM_POINT_LIGHT_SHADOWS > 0 && ( defined( SHADOWMAP_TYPE_PCF ) || defined( SHADOWMAP_TYPE_BASIC ) )
	PointLightShadow pointLight;
	#pragma unroll_loop_start
	for ( int i = 0; i < NUM_POINT_LIGHT_SHADOWS; i ++ ) {
		pointLight = pointLightShadows[ i ];
		shadow *= receiveShadow ? getPointShadow( pointShadowMap[ i ], pointLight.shadowMapSize, pointLight.shadowIntensity, pointLight.shadowBias, pointLight.shadowRadius, vPointShadowCoord[ i ], pointLight.shadowCameraNear, pointLight.shadowCameraFar ) : 1.0;
	}
	#pragma unroll_loop_end
	#endif
	#endif
	return shadow;
}`,Yy=`#ifdef USE_SKINNING
	mat4 boneMatX = getBoneMatrix( skinIndex.x );
	mat4 boneMatY = getBoneMatrix( skinIndex.y );
	mat4 boneMatZ = getBoneMatrix( skinIndex.z );
	mat4 boneMatW = getBoneMatrix( skinIndex.w );
#endif`,Zy=`#ifdef USE_SKINNING
	uniform mat4 bindMatrix;
	uniform mat4 bindMatrixInverse;
	uniform highp sampler2D boneTexture;
	mat4 getBoneMatrix( const in float i ) {
		int size = textureSize( boneTexture, 0 ).x;
		int j = int( i ) * 4;
		int x = j % size;
		int y = j / size;
		vec4 v1 = texelFetch( boneTexture, ivec2( x, y ), 0 );
		vec4 v2 = texelFetch( boneTexture, ivec2( x + 1, y ), 0 );
		vec4 v3 = texelFetch( boneTexture, ivec2( x + 2, y ), 0 );
		vec4 v4 = texelFetch( boneTexture, ivec2( x + 3, y ), 0 );
		return mat4( v1, v2, v3, v4 );
	}
#endif`,$y=`#ifdef USE_SKINNING
	vec4 skinVertex = bindMatrix * vec4( transformed, 1.0 );
	vec4 skinned = vec4( 0.0 );
	skinned += boneMatX * skinVertex * skinWeight.x;
	skinned += boneMatY * skinVertex * skinWeight.y;
	skinned += boneMatZ * skinVertex * skinWeight.z;
	skinned += boneMatW * skinVertex * skinWeight.w;
	transformed = ( bindMatrixInverse * skinned ).xyz;
#endif`,Jy=`#ifdef USE_SKINNING
	mat4 skinMatrix = mat4( 0.0 );
	skinMatrix += skinWeight.x * boneMatX;
	skinMatrix += skinWeight.y * boneMatY;
	skinMatrix += skinWeight.z * boneMatZ;
	skinMatrix += skinWeight.w * boneMatW;
	skinMatrix = bindMatrixInverse * skinMatrix * bindMatrix;
	objectNormal = vec4( skinMatrix * vec4( objectNormal, 0.0 ) ).xyz;
	#ifdef USE_TANGENT
		objectTangent = vec4( skinMatrix * vec4( objectTangent, 0.0 ) ).xyz;
	#endif
#endif`,Ky=`float specularStrength;
#ifdef USE_SPECULARMAP
	vec4 texelSpecular = texture2D( specularMap, vSpecularMapUv );
	specularStrength = texelSpecular.r;
#else
	specularStrength = 1.0;
#endif`,jy=`#ifdef USE_SPECULARMAP
	uniform sampler2D specularMap;
#endif`,Qy=`#if defined( TONE_MAPPING )
	gl_FragColor.rgb = toneMapping( gl_FragColor.rgb );
#endif`,tv=`#ifndef saturate
#define saturate( a ) clamp( a, 0.0, 1.0 )
#endif
uniform float toneMappingExposure;
vec3 LinearToneMapping( vec3 color ) {
	return saturate( toneMappingExposure * color );
}
vec3 ReinhardToneMapping( vec3 color ) {
	color *= toneMappingExposure;
	return saturate( color / ( vec3( 1.0 ) + color ) );
}
vec3 CineonToneMapping( vec3 color ) {
	color *= toneMappingExposure;
	color = max( vec3( 0.0 ), color - 0.004 );
	return pow( ( color * ( 6.2 * color + 0.5 ) ) / ( color * ( 6.2 * color + 1.7 ) + 0.06 ), vec3( 2.2 ) );
}
vec3 RRTAndODTFit( vec3 v ) {
	vec3 a = v * ( v + 0.0245786 ) - 0.000090537;
	vec3 b = v * ( 0.983729 * v + 0.4329510 ) + 0.238081;
	return a / b;
}
vec3 ACESFilmicToneMapping( vec3 color ) {
	const mat3 ACESInputMat = mat3(
		vec3( 0.59719, 0.07600, 0.02840 ),		vec3( 0.35458, 0.90834, 0.13383 ),
		vec3( 0.04823, 0.01566, 0.83777 )
	);
	const mat3 ACESOutputMat = mat3(
		vec3(  1.60475, -0.10208, -0.00327 ),		vec3( -0.53108,  1.10813, -0.07276 ),
		vec3( -0.07367, -0.00605,  1.07602 )
	);
	color *= toneMappingExposure / 0.6;
	color = ACESInputMat * color;
	color = RRTAndODTFit( color );
	color = ACESOutputMat * color;
	return saturate( color );
}
const mat3 LINEAR_REC2020_TO_LINEAR_SRGB = mat3(
	vec3( 1.6605, - 0.1246, - 0.0182 ),
	vec3( - 0.5876, 1.1329, - 0.1006 ),
	vec3( - 0.0728, - 0.0083, 1.1187 )
);
const mat3 LINEAR_SRGB_TO_LINEAR_REC2020 = mat3(
	vec3( 0.6274, 0.0691, 0.0164 ),
	vec3( 0.3293, 0.9195, 0.0880 ),
	vec3( 0.0433, 0.0113, 0.8956 )
);
vec3 agxDefaultContrastApprox( vec3 x ) {
	vec3 x2 = x * x;
	vec3 x4 = x2 * x2;
	return + 15.5 * x4 * x2
		- 40.14 * x4 * x
		+ 31.96 * x4
		- 6.868 * x2 * x
		+ 0.4298 * x2
		+ 0.1191 * x
		- 0.00232;
}
vec3 AgXToneMapping( vec3 color ) {
	const mat3 AgXInsetMatrix = mat3(
		vec3( 0.856627153315983, 0.137318972929847, 0.11189821299995 ),
		vec3( 0.0951212405381588, 0.761241990602591, 0.0767994186031903 ),
		vec3( 0.0482516061458583, 0.101439036467562, 0.811302368396859 )
	);
	const mat3 AgXOutsetMatrix = mat3(
		vec3( 1.1271005818144368, - 0.1413297634984383, - 0.14132976349843826 ),
		vec3( - 0.11060664309660323, 1.157823702216272, - 0.11060664309660294 ),
		vec3( - 0.016493938717834573, - 0.016493938717834257, 1.2519364065950405 )
	);
	const float AgxMinEv = - 12.47393;	const float AgxMaxEv = 4.026069;
	color *= toneMappingExposure;
	color = LINEAR_SRGB_TO_LINEAR_REC2020 * color;
	color = AgXInsetMatrix * color;
	color = max( color, 1e-10 );	color = log2( color );
	color = ( color - AgxMinEv ) / ( AgxMaxEv - AgxMinEv );
	color = clamp( color, 0.0, 1.0 );
	color = agxDefaultContrastApprox( color );
	color = AgXOutsetMatrix * color;
	color = pow( max( vec3( 0.0 ), color ), vec3( 2.2 ) );
	color = LINEAR_REC2020_TO_LINEAR_SRGB * color;
	color = clamp( color, 0.0, 1.0 );
	return color;
}
vec3 NeutralToneMapping( vec3 color ) {
	const float StartCompression = 0.8 - 0.04;
	const float Desaturation = 0.15;
	color *= toneMappingExposure;
	float x = min( color.r, min( color.g, color.b ) );
	float offset = x < 0.08 ? x - 6.25 * x * x : 0.04;
	color -= offset;
	float peak = max( color.r, max( color.g, color.b ) );
	if ( peak < StartCompression ) return color;
	float d = 1. - StartCompression;
	float newPeak = 1. - d * d / ( peak + d - StartCompression );
	color *= newPeak / peak;
	float g = 1. - 1. / ( Desaturation * ( peak - newPeak ) + 1. );
	return mix( color, vec3( newPeak ), g );
}
vec3 CustomToneMapping( vec3 color ) { return color; }`,ev=`#ifdef USE_TRANSMISSION
	material.transmission = transmission;
	material.transmissionAlpha = 1.0;
	material.thickness = thickness;
	material.attenuationDistance = attenuationDistance;
	material.attenuationColor = attenuationColor;
	#ifdef USE_TRANSMISSIONMAP
		material.transmission *= texture2D( transmissionMap, vTransmissionMapUv ).r;
	#endif
	#ifdef USE_THICKNESSMAP
		material.thickness *= texture2D( thicknessMap, vThicknessMapUv ).g;
	#endif
	vec3 pos = vWorldPosition;
	vec3 v = normalize( cameraPosition - pos );
	vec3 n = transformNormalByInverseViewMatrix( normal, viewMatrix );
	vec4 transmitted = getIBLVolumeRefraction(
		n, v, material.roughness, material.diffuseContribution, material.specularColorBlended, material.specularF90,
		pos, modelMatrix, viewMatrix, projectionMatrix, material.dispersion, material.ior, material.thickness,
		material.attenuationColor, material.attenuationDistance );
	material.transmissionAlpha = mix( material.transmissionAlpha, transmitted.a, material.transmission );
	totalDiffuse = mix( totalDiffuse, transmitted.rgb, material.transmission );
#endif`,nv=`#ifdef USE_TRANSMISSION
	uniform float transmission;
	uniform float thickness;
	uniform float attenuationDistance;
	uniform vec3 attenuationColor;
	#ifdef USE_TRANSMISSIONMAP
		uniform sampler2D transmissionMap;
	#endif
	#ifdef USE_THICKNESSMAP
		uniform sampler2D thicknessMap;
	#endif
	uniform vec2 transmissionSamplerSize;
	uniform sampler2D transmissionSamplerMap;
	uniform mat4 modelMatrix;
	uniform mat4 projectionMatrix;
	varying vec3 vWorldPosition;
	float w0( float a ) {
		return ( 1.0 / 6.0 ) * ( a * ( a * ( - a + 3.0 ) - 3.0 ) + 1.0 );
	}
	float w1( float a ) {
		return ( 1.0 / 6.0 ) * ( a *  a * ( 3.0 * a - 6.0 ) + 4.0 );
	}
	float w2( float a ){
		return ( 1.0 / 6.0 ) * ( a * ( a * ( - 3.0 * a + 3.0 ) + 3.0 ) + 1.0 );
	}
	float w3( float a ) {
		return ( 1.0 / 6.0 ) * ( a * a * a );
	}
	float g0( float a ) {
		return w0( a ) + w1( a );
	}
	float g1( float a ) {
		return w2( a ) + w3( a );
	}
	float h0( float a ) {
		return - 1.0 + w1( a ) / ( w0( a ) + w1( a ) );
	}
	float h1( float a ) {
		return 1.0 + w3( a ) / ( w2( a ) + w3( a ) );
	}
	vec4 bicubic( sampler2D tex, vec2 uv, vec4 texelSize, float lod ) {
		uv = uv * texelSize.zw + 0.5;
		vec2 iuv = floor( uv );
		vec2 fuv = fract( uv );
		float g0x = g0( fuv.x );
		float g1x = g1( fuv.x );
		float h0x = h0( fuv.x );
		float h1x = h1( fuv.x );
		float h0y = h0( fuv.y );
		float h1y = h1( fuv.y );
		vec2 p0 = ( vec2( iuv.x + h0x, iuv.y + h0y ) - 0.5 ) * texelSize.xy;
		vec2 p1 = ( vec2( iuv.x + h1x, iuv.y + h0y ) - 0.5 ) * texelSize.xy;
		vec2 p2 = ( vec2( iuv.x + h0x, iuv.y + h1y ) - 0.5 ) * texelSize.xy;
		vec2 p3 = ( vec2( iuv.x + h1x, iuv.y + h1y ) - 0.5 ) * texelSize.xy;
		return g0( fuv.y ) * ( g0x * textureLod( tex, p0, lod ) + g1x * textureLod( tex, p1, lod ) ) +
			g1( fuv.y ) * ( g0x * textureLod( tex, p2, lod ) + g1x * textureLod( tex, p3, lod ) );
	}
	vec4 textureBicubic( sampler2D sampler, vec2 uv, float lod ) {
		vec2 fLodSize = vec2( textureSize( sampler, int( lod ) ) );
		vec2 cLodSize = vec2( textureSize( sampler, int( lod + 1.0 ) ) );
		vec2 fLodSizeInv = 1.0 / fLodSize;
		vec2 cLodSizeInv = 1.0 / cLodSize;
		vec4 fSample = bicubic( sampler, uv, vec4( fLodSizeInv, fLodSize ), floor( lod ) );
		vec4 cSample = bicubic( sampler, uv, vec4( cLodSizeInv, cLodSize ), ceil( lod ) );
		return mix( fSample, cSample, fract( lod ) );
	}
	vec3 getVolumeTransmissionRay( const in vec3 n, const in vec3 v, const in float thickness, const in float ior, const in mat4 modelMatrix ) {
		vec3 refractionVector = refract( - v, normalize( n ), 1.0 / ior );
		vec3 modelScale;
		modelScale.x = length( vec3( modelMatrix[ 0 ].xyz ) );
		modelScale.y = length( vec3( modelMatrix[ 1 ].xyz ) );
		modelScale.z = length( vec3( modelMatrix[ 2 ].xyz ) );
		return normalize( refractionVector ) * thickness * modelScale;
	}
	float applyIorToRoughness( const in float roughness, const in float ior ) {
		return roughness * clamp( ior * 2.0 - 2.0, 0.0, 1.0 );
	}
	vec4 getTransmissionSample( const in vec2 fragCoord, const in float roughness, const in float ior ) {
		float lod = log2( transmissionSamplerSize.x ) * applyIorToRoughness( roughness, ior );
		return textureBicubic( transmissionSamplerMap, fragCoord.xy, lod );
	}
	vec3 volumeAttenuation( const in float transmissionDistance, const in vec3 attenuationColor, const in float attenuationDistance ) {
		if ( isinf( attenuationDistance ) ) {
			return vec3( 1.0 );
		} else {
			vec3 attenuationCoefficient = -log( attenuationColor ) / attenuationDistance;
			vec3 transmittance = exp( - attenuationCoefficient * transmissionDistance );			return transmittance;
		}
	}
	vec4 getIBLVolumeRefraction( const in vec3 n, const in vec3 v, const in float roughness, const in vec3 diffuseColor,
		const in vec3 specularColor, const in float specularF90, const in vec3 position, const in mat4 modelMatrix,
		const in mat4 viewMatrix, const in mat4 projMatrix, const in float dispersion, const in float ior, const in float thickness,
		const in vec3 attenuationColor, const in float attenuationDistance ) {
		vec4 transmittedLight;
		vec3 transmittance;
		#ifdef USE_DISPERSION
			float halfSpread = ( ior - 1.0 ) * 0.025 * dispersion;
			vec3 iors = vec3( ior - halfSpread, ior, ior + halfSpread );
			for ( int i = 0; i < 3; i ++ ) {
				vec3 transmissionRay = getVolumeTransmissionRay( n, v, thickness, iors[ i ], modelMatrix );
				vec3 refractedRayExit = position + transmissionRay;
				vec4 ndcPos = projMatrix * viewMatrix * vec4( refractedRayExit, 1.0 );
				vec2 refractionCoords = ndcPos.xy / ndcPos.w;
				refractionCoords += 1.0;
				refractionCoords /= 2.0;
				vec4 transmissionSample = getTransmissionSample( refractionCoords, roughness, iors[ i ] );
				transmittedLight[ i ] = transmissionSample[ i ];
				transmittedLight.a += transmissionSample.a;
				transmittance[ i ] = diffuseColor[ i ] * volumeAttenuation( length( transmissionRay ), attenuationColor, attenuationDistance )[ i ];
			}
			transmittedLight.a /= 3.0;
		#else
			vec3 transmissionRay = getVolumeTransmissionRay( n, v, thickness, ior, modelMatrix );
			vec3 refractedRayExit = position + transmissionRay;
			vec4 ndcPos = projMatrix * viewMatrix * vec4( refractedRayExit, 1.0 );
			vec2 refractionCoords = ndcPos.xy / ndcPos.w;
			refractionCoords += 1.0;
			refractionCoords /= 2.0;
			transmittedLight = getTransmissionSample( refractionCoords, roughness, ior );
			transmittance = diffuseColor * volumeAttenuation( length( transmissionRay ), attenuationColor, attenuationDistance );
		#endif
		vec3 attenuatedColor = transmittance * transmittedLight.rgb;
		vec3 F = EnvironmentBRDF( n, v, specularColor, specularF90, roughness );
		float transmittanceFactor = ( transmittance.r + transmittance.g + transmittance.b ) / 3.0;
		return vec4( ( 1.0 - F ) * attenuatedColor, 1.0 - ( 1.0 - transmittedLight.a ) * transmittanceFactor );
	}
#endif`,iv=`#if defined( USE_UV ) || defined( USE_ANISOTROPY )
	varying vec2 vUv;
#endif
#ifdef USE_MAP
	varying vec2 vMapUv;
#endif
#ifdef USE_ALPHAMAP
	varying vec2 vAlphaMapUv;
#endif
#ifdef USE_LIGHTMAP
	varying vec2 vLightMapUv;
#endif
#ifdef USE_AOMAP
	varying vec2 vAoMapUv;
#endif
#ifdef USE_BUMPMAP
	varying vec2 vBumpMapUv;
#endif
#ifdef USE_NORMALMAP
	varying vec2 vNormalMapUv;
#endif
#ifdef USE_EMISSIVEMAP
	varying vec2 vEmissiveMapUv;
#endif
#ifdef USE_METALNESSMAP
	varying vec2 vMetalnessMapUv;
#endif
#ifdef USE_ROUGHNESSMAP
	varying vec2 vRoughnessMapUv;
#endif
#ifdef USE_DIFFUSE_ROUGHNESSMAP
	varying vec2 vDiffuseRoughnessMapUv;
#endif
#ifdef USE_ANISOTROPYMAP
	varying vec2 vAnisotropyMapUv;
#endif
#ifdef USE_CLEARCOATMAP
	varying vec2 vClearcoatMapUv;
#endif
#ifdef USE_CLEARCOAT_NORMALMAP
	varying vec2 vClearcoatNormalMapUv;
#endif
#ifdef USE_CLEARCOAT_ROUGHNESSMAP
	varying vec2 vClearcoatRoughnessMapUv;
#endif
#ifdef USE_IRIDESCENCEMAP
	varying vec2 vIridescenceMapUv;
#endif
#ifdef USE_IRIDESCENCE_THICKNESSMAP
	varying vec2 vIridescenceThicknessMapUv;
#endif
#ifdef USE_SHEEN_COLORMAP
	varying vec2 vSheenColorMapUv;
#endif
#ifdef USE_SHEEN_ROUGHNESSMAP
	varying vec2 vSheenRoughnessMapUv;
#endif
#ifdef USE_SPECULARMAP
	varying vec2 vSpecularMapUv;
#endif
#ifdef USE_SPECULAR_COLORMAP
	varying vec2 vSpecularColorMapUv;
#endif
#ifdef USE_SPECULAR_INTENSITYMAP
	varying vec2 vSpecularIntensityMapUv;
#endif
#ifdef USE_TRANSMISSIONMAP
	uniform mat3 transmissionMapTransform;
	varying vec2 vTransmissionMapUv;
#endif
#ifdef USE_THICKNESSMAP
	uniform mat3 thicknessMapTransform;
	varying vec2 vThicknessMapUv;
#endif`,sv=`#if defined( USE_UV ) || defined( USE_ANISOTROPY )
	varying vec2 vUv;
#endif
#ifdef USE_MAP
	uniform mat3 mapTransform;
	varying vec2 vMapUv;
#endif
#ifdef USE_ALPHAMAP
	uniform mat3 alphaMapTransform;
	varying vec2 vAlphaMapUv;
#endif
#ifdef USE_LIGHTMAP
	uniform mat3 lightMapTransform;
	varying vec2 vLightMapUv;
#endif
#ifdef USE_AOMAP
	uniform mat3 aoMapTransform;
	varying vec2 vAoMapUv;
#endif
#ifdef USE_BUMPMAP
	uniform mat3 bumpMapTransform;
	varying vec2 vBumpMapUv;
#endif
#ifdef USE_NORMALMAP
	uniform mat3 normalMapTransform;
	varying vec2 vNormalMapUv;
#endif
#ifdef USE_DISPLACEMENTMAP
	uniform mat3 displacementMapTransform;
	varying vec2 vDisplacementMapUv;
#endif
#ifdef USE_EMISSIVEMAP
	uniform mat3 emissiveMapTransform;
	varying vec2 vEmissiveMapUv;
#endif
#ifdef USE_METALNESSMAP
	uniform mat3 metalnessMapTransform;
	varying vec2 vMetalnessMapUv;
#endif
#ifdef USE_ROUGHNESSMAP
	uniform mat3 roughnessMapTransform;
	varying vec2 vRoughnessMapUv;
#endif
#ifdef USE_DIFFUSE_ROUGHNESSMAP
	uniform mat3 diffuseRoughnessMapTransform;
	varying vec2 vDiffuseRoughnessMapUv;
#endif
#ifdef USE_ANISOTROPYMAP
	uniform mat3 anisotropyMapTransform;
	varying vec2 vAnisotropyMapUv;
#endif
#ifdef USE_CLEARCOATMAP
	uniform mat3 clearcoatMapTransform;
	varying vec2 vClearcoatMapUv;
#endif
#ifdef USE_CLEARCOAT_NORMALMAP
	uniform mat3 clearcoatNormalMapTransform;
	varying vec2 vClearcoatNormalMapUv;
#endif
#ifdef USE_CLEARCOAT_ROUGHNESSMAP
	uniform mat3 clearcoatRoughnessMapTransform;
	varying vec2 vClearcoatRoughnessMapUv;
#endif
#ifdef USE_SHEEN_COLORMAP
	uniform mat3 sheenColorMapTransform;
	varying vec2 vSheenColorMapUv;
#endif
#ifdef USE_SHEEN_ROUGHNESSMAP
	uniform mat3 sheenRoughnessMapTransform;
	varying vec2 vSheenRoughnessMapUv;
#endif
#ifdef USE_IRIDESCENCEMAP
	uniform mat3 iridescenceMapTransform;
	varying vec2 vIridescenceMapUv;
#endif
#ifdef USE_IRIDESCENCE_THICKNESSMAP
	uniform mat3 iridescenceThicknessMapTransform;
	varying vec2 vIridescenceThicknessMapUv;
#endif
#ifdef USE_SPECULARMAP
	uniform mat3 specularMapTransform;
	varying vec2 vSpecularMapUv;
#endif
#ifdef USE_SPECULAR_COLORMAP
	uniform mat3 specularColorMapTransform;
	varying vec2 vSpecularColorMapUv;
#endif
#ifdef USE_SPECULAR_INTENSITYMAP
	uniform mat3 specularIntensityMapTransform;
	varying vec2 vSpecularIntensityMapUv;
#endif
#ifdef USE_TRANSMISSIONMAP
	uniform mat3 transmissionMapTransform;
	varying vec2 vTransmissionMapUv;
#endif
#ifdef USE_THICKNESSMAP
	uniform mat3 thicknessMapTransform;
	varying vec2 vThicknessMapUv;
#endif`,rv=`#if defined( USE_UV ) || defined( USE_ANISOTROPY )
	vUv = vec3( uv, 1 ).xy;
#endif
#ifdef USE_MAP
	vMapUv = ( mapTransform * vec3( MAP_UV, 1 ) ).xy;
#endif
#ifdef USE_ALPHAMAP
	vAlphaMapUv = ( alphaMapTransform * vec3( ALPHAMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_LIGHTMAP
	vLightMapUv = ( lightMapTransform * vec3( LIGHTMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_AOMAP
	vAoMapUv = ( aoMapTransform * vec3( AOMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_BUMPMAP
	vBumpMapUv = ( bumpMapTransform * vec3( BUMPMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_NORMALMAP
	vNormalMapUv = ( normalMapTransform * vec3( NORMALMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_DISPLACEMENTMAP
	vDisplacementMapUv = ( displacementMapTransform * vec3( DISPLACEMENTMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_EMISSIVEMAP
	vEmissiveMapUv = ( emissiveMapTransform * vec3( EMISSIVEMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_METALNESSMAP
	vMetalnessMapUv = ( metalnessMapTransform * vec3( METALNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_ROUGHNESSMAP
	vRoughnessMapUv = ( roughnessMapTransform * vec3( ROUGHNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_DIFFUSE_ROUGHNESSMAP
	vDiffuseRoughnessMapUv = ( diffuseRoughnessMapTransform * vec3( DIFFUSE_ROUGHNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_ANISOTROPYMAP
	vAnisotropyMapUv = ( anisotropyMapTransform * vec3( ANISOTROPYMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_CLEARCOATMAP
	vClearcoatMapUv = ( clearcoatMapTransform * vec3( CLEARCOATMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_CLEARCOAT_NORMALMAP
	vClearcoatNormalMapUv = ( clearcoatNormalMapTransform * vec3( CLEARCOAT_NORMALMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_CLEARCOAT_ROUGHNESSMAP
	vClearcoatRoughnessMapUv = ( clearcoatRoughnessMapTransform * vec3( CLEARCOAT_ROUGHNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_IRIDESCENCEMAP
	vIridescenceMapUv = ( iridescenceMapTransform * vec3( IRIDESCENCEMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_IRIDESCENCE_THICKNESSMAP
	vIridescenceThicknessMapUv = ( iridescenceThicknessMapTransform * vec3( IRIDESCENCE_THICKNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_SHEEN_COLORMAP
	vSheenColorMapUv = ( sheenColorMapTransform * vec3( SHEEN_COLORMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_SHEEN_ROUGHNESSMAP
	vSheenRoughnessMapUv = ( sheenRoughnessMapTransform * vec3( SHEEN_ROUGHNESSMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_SPECULARMAP
	vSpecularMapUv = ( specularMapTransform * vec3( SPECULARMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_SPECULAR_COLORMAP
	vSpecularColorMapUv = ( specularColorMapTransform * vec3( SPECULAR_COLORMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_SPECULAR_INTENSITYMAP
	vSpecularIntensityMapUv = ( specularIntensityMapTransform * vec3( SPECULAR_INTENSITYMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_TRANSMISSIONMAP
	vTransmissionMapUv = ( transmissionMapTransform * vec3( TRANSMISSIONMAP_UV, 1 ) ).xy;
#endif
#ifdef USE_THICKNESSMAP
	vThicknessMapUv = ( thicknessMapTransform * vec3( THICKNESSMAP_UV, 1 ) ).xy;
#endif`,ov=`#if defined( USE_ENVMAP ) || defined( DISTANCE ) || defined ( USE_SHADOWMAP ) || defined ( USE_TRANSMISSION ) || NUM_SPOT_LIGHT_COORDS > 0
	vec4 worldPosition = vec4( transformed, 1.0 );
	#ifdef USE_BATCHING
		worldPosition = batchingMatrix * worldPosition;
	#endif
	#ifdef USE_INSTANCING
		worldPosition = instanceMatrix * worldPosition;
	#endif
	worldPosition = modelMatrix * worldPosition;
#endif`,av=`varying vec2 vUv;
uniform mat3 uvTransform;
void main() {
	vUv = ( uvTransform * vec3( uv, 1 ) ).xy;
	gl_Position = vec4( position.xy, 1.0, 1.0 );
}`,lv=`uniform sampler2D t2D;
uniform float backgroundIntensity;
varying vec2 vUv;
void main() {
	vec4 texColor = texture2D( t2D, vUv );
	#ifdef DECODE_VIDEO_TEXTURE
		texColor = vec4( mix( pow( texColor.rgb * 0.9478672986 + vec3( 0.0521327014 ), vec3( 2.4 ) ), texColor.rgb * 0.0773993808, vec3( lessThanEqual( texColor.rgb, vec3( 0.04045 ) ) ) ), texColor.w );
	#endif
	texColor.rgb *= backgroundIntensity;
	gl_FragColor = texColor;
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
}`,cv=`varying vec3 vWorldDirection;
#include <common>
void main() {
	vWorldDirection = transformDirection( position, modelMatrix );
	#include <begin_vertex>
	#include <project_vertex>
	gl_Position.z = gl_Position.w;
}`,hv=`uniform float backgroundBlurriness;
uniform float backgroundIntensity;
uniform mat3 backgroundRotation;
varying vec3 vWorldDirection;
#include <envmap_common_pars_fragment>
void main() {
	#ifdef ENVMAP_TYPE_PMREM
		vec4 texColor = textureLod( envMap, backgroundRotation * vWorldDirection, roughnessToMip( backgroundBlurriness ) );
	#else
		vec4 texColor = textureCube( envMap, backgroundRotation * vWorldDirection );
	#endif
	texColor.rgb *= backgroundIntensity;
	gl_FragColor = texColor;
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
}`,uv=`varying vec3 vWorldDirection;
#include <common>
void main() {
	vWorldDirection = transformDirection( position, modelMatrix );
	#include <begin_vertex>
	#include <project_vertex>
	gl_Position.z = gl_Position.w;
}`,fv=`uniform samplerCube tCube;
uniform float tFlip;
uniform float opacity;
varying vec3 vWorldDirection;
void main() {
	vec4 texColor = textureCube( tCube, vec3( tFlip * vWorldDirection.x, vWorldDirection.yz ) );
	gl_FragColor = texColor;
	gl_FragColor.a *= opacity;
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
}`,dv=`#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
varying vec2 vHighPrecisionZW;
void main() {
	#include <uv_vertex>
	#include <batching_vertex>
	#include <skinbase_vertex>
	#include <morphinstance_vertex>
	#ifdef USE_DISPLACEMENTMAP
		#include <beginnormal_vertex>
		#include <morphnormal_vertex>
		#include <skinnormal_vertex>
	#endif
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	vHighPrecisionZW = gl_Position.zw;
}`,pv=`#if DEPTH_PACKING == 3200
	uniform float opacity;
#endif
#include <common>
#include <packing>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
varying vec2 vHighPrecisionZW;
void main() {
	vec4 diffuseColor = vec4( 1.0 );
	#include <clipping_planes_fragment>
	#if DEPTH_PACKING == 3200
		diffuseColor.a = opacity;
	#endif
	#include <map_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <logdepthbuf_fragment>
	#ifdef USE_REVERSED_DEPTH_BUFFER
		float fragCoordZ = vHighPrecisionZW[ 0 ] / vHighPrecisionZW[ 1 ];
	#else
		float fragCoordZ = 0.5 * vHighPrecisionZW[ 0 ] / vHighPrecisionZW[ 1 ] + 0.5;
	#endif
	#if DEPTH_PACKING == 3200
		gl_FragColor = vec4( vec3( 1.0 - fragCoordZ ), opacity );
	#elif DEPTH_PACKING == 3201
		gl_FragColor = packDepthToRGBA( fragCoordZ );
	#elif DEPTH_PACKING == 3202
		gl_FragColor = vec4( packDepthToRGB( fragCoordZ ), 1.0 );
	#elif DEPTH_PACKING == 3203
		gl_FragColor = vec4( packDepthToRG( fragCoordZ ), 0.0, 1.0 );
	#endif
}`,mv=`#define DISTANCE
varying vec3 vWorldPosition;
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <batching_vertex>
	#include <skinbase_vertex>
	#include <morphinstance_vertex>
	#ifdef USE_DISPLACEMENTMAP
		#include <beginnormal_vertex>
		#include <morphnormal_vertex>
		#include <skinnormal_vertex>
	#endif
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <worldpos_vertex>
	#include <clipping_planes_vertex>
	vWorldPosition = worldPosition.xyz;
}`,gv=`#define DISTANCE
uniform vec3 referencePosition;
uniform float nearDistance;
uniform float farDistance;
varying vec3 vWorldPosition;
#include <common>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( 1.0 );
	#include <clipping_planes_fragment>
	#include <map_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	float dist = length( vWorldPosition - referencePosition );
	dist = ( dist - nearDistance ) / ( farDistance - nearDistance );
	dist = saturate( dist );
	gl_FragColor = vec4( dist, 0.0, 0.0, 1.0 );
}`,_v=`varying vec3 vWorldDirection;
#include <common>
void main() {
	vWorldDirection = transformDirection( position, modelMatrix );
	#include <begin_vertex>
	#include <project_vertex>
}`,xv=`uniform sampler2D tEquirect;
varying vec3 vWorldDirection;
#include <common>
void main() {
	vec3 direction = normalize( vWorldDirection );
	vec2 sampleUV = equirectUv( direction );
	gl_FragColor = texture2D( tEquirect, sampleUV );
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
}`,yv=`uniform float scale;
attribute float lineDistance;
varying float vLineDistance;
#include <common>
#include <uv_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <morphtarget_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	vLineDistance = scale * lineDistance;
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	#include <fog_vertex>
}`,vv=`uniform vec3 diffuse;
uniform float opacity;
uniform float dashSize;
uniform float totalSize;
varying float vLineDistance;
#include <common>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <fog_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	if ( mod( vLineDistance, totalSize ) > dashSize ) {
		discard;
	}
	vec3 outgoingLight = vec3( 0.0 );
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	outgoingLight = diffuseColor.rgb;
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
}`,Sv=`#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <envmap_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#if defined ( USE_ENVMAP ) || defined ( USE_SKINNING )
		#include <beginnormal_vertex>
		#include <morphnormal_vertex>
		#include <skinbase_vertex>
		#include <skinnormal_vertex>
		#include <defaultnormal_vertex>
	#endif
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	#include <worldpos_vertex>
	#include <envmap_vertex>
	#include <fog_vertex>
}`,Mv=`uniform vec3 diffuse;
uniform float opacity;
#ifndef FLAT_SHADED
	varying vec3 vNormal;
#endif
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <aomap_pars_fragment>
#include <lightmap_pars_fragment>
#include <envmap_common_pars_fragment>
#include <envmap_pars_fragment>
#include <fog_pars_fragment>
#include <specularmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <specularmap_fragment>
	ReflectedLight reflectedLight = ReflectedLight( vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ) );
	#ifdef USE_LIGHTMAP
		vec4 lightMapTexel = texture2D( lightMap, vLightMapUv );
		reflectedLight.indirectDiffuse += lightMapTexel.rgb * lightMapIntensity * RECIPROCAL_PI;
	#else
		reflectedLight.indirectDiffuse += vec3( 1.0 );
	#endif
	#include <aomap_fragment>
	reflectedLight.indirectDiffuse *= diffuseColor.rgb;
	vec3 outgoingLight = reflectedLight.indirectDiffuse;
	#include <envmap_fragment>
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,bv=`#define LAMBERT
varying vec3 vViewPosition;
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <envmap_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <shadowmap_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	vViewPosition = - mvPosition.xyz;
	#include <worldpos_vertex>
	#include <envmap_vertex>
	#include <shadowmap_vertex>
	#include <fog_vertex>
}`,wv=`#define LAMBERT
uniform vec3 diffuse;
uniform vec3 emissive;
uniform float opacity;
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <aomap_pars_fragment>
#include <lightmap_pars_fragment>
#include <emissivemap_pars_fragment>
#include <envmap_common_pars_fragment>
#include <envmap_pars_fragment>
#include <envmap_physical_pars_fragment>
#include <fog_pars_fragment>
#include <bsdfs>
#include <lights_pars_begin>
#include <normal_pars_fragment>
#include <lights_lambert_pars_fragment>
#include <shadowmap_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <specularmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	ReflectedLight reflectedLight = ReflectedLight( vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ) );
	vec3 totalEmissiveRadiance = emissive;
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <specularmap_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	#include <emissivemap_fragment>
	#include <lights_lambert_fragment>
	#include <lights_fragment_begin>
	#include <lights_fragment_maps>
	#include <lights_fragment_end>
	#include <aomap_fragment>
	vec3 outgoingLight = reflectedLight.directDiffuse + reflectedLight.indirectDiffuse + totalEmissiveRadiance;
	#include <envmap_fragment>
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,Ev=`#define MATCAP
varying vec3 vViewPosition;
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <color_pars_vertex>
#include <displacementmap_pars_vertex>
#include <fog_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	#include <fog_vertex>
	vViewPosition = - mvPosition.xyz;
}`,Tv=`#define MATCAP
uniform vec3 diffuse;
uniform float opacity;
uniform sampler2D matcap;
varying vec3 vViewPosition;
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <fog_pars_fragment>
#include <normal_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	vec3 viewDir = normalize( vViewPosition );
	vec3 x = normalize( vec3( viewDir.z, 0.0, - viewDir.x ) );
	vec3 y = cross( viewDir, x );
	vec2 uv = vec2( dot( x, normal ), dot( y, normal ) ) * 0.495 + 0.5;
	#ifdef USE_MATCAP
		vec4 matcapColor = texture2D( matcap, uv );
	#else
		vec4 matcapColor = vec4( vec3( mix( 0.2, 0.8, uv.y ) ), 1.0 );
	#endif
	vec3 outgoingLight = diffuseColor.rgb * matcapColor.rgb;
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,Av=`#define NORMAL
#if defined( FLAT_SHADED ) || defined( USE_BUMPMAP ) || defined( USE_NORMALMAP_TANGENTSPACE )
	varying vec3 vViewPosition;
#endif
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphinstance_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
#if defined( FLAT_SHADED ) || defined( USE_BUMPMAP ) || defined( USE_NORMALMAP_TANGENTSPACE )
	vViewPosition = - mvPosition.xyz;
#endif
}`,Rv=`#define NORMAL
uniform float opacity;
#if defined( FLAT_SHADED ) || defined( USE_BUMPMAP ) || defined( USE_NORMALMAP_TANGENTSPACE )
	varying vec3 vViewPosition;
#endif
#include <uv_pars_fragment>
#include <normal_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( 0.0, 0.0, 0.0, opacity );
	#include <clipping_planes_fragment>
	#include <logdepthbuf_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	gl_FragColor = vec4( normalize( normal ) * 0.5 + 0.5, diffuseColor.a );
	#ifdef OPAQUE
		gl_FragColor.a = 1.0;
	#endif
}`,Cv=`#define PHONG
varying vec3 vViewPosition;
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <envmap_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <shadowmap_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphinstance_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	vViewPosition = - mvPosition.xyz;
	#include <worldpos_vertex>
	#include <envmap_vertex>
	#include <shadowmap_vertex>
	#include <fog_vertex>
}`,Pv=`#define PHONG
uniform vec3 diffuse;
uniform vec3 emissive;
uniform vec3 specular;
uniform float shininess;
uniform float opacity;
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <aomap_pars_fragment>
#include <lightmap_pars_fragment>
#include <emissivemap_pars_fragment>
#include <envmap_common_pars_fragment>
#include <envmap_pars_fragment>
#include <envmap_physical_pars_fragment>
#include <fog_pars_fragment>
#include <bsdfs>
#include <lights_pars_begin>
#include <normal_pars_fragment>
#include <lights_phong_pars_fragment>
#include <shadowmap_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <specularmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	ReflectedLight reflectedLight = ReflectedLight( vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ) );
	vec3 totalEmissiveRadiance = emissive;
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <specularmap_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	#include <emissivemap_fragment>
	#include <lights_phong_fragment>
	#include <lights_fragment_begin>
	#include <lights_fragment_maps>
	#include <lights_fragment_end>
	#include <aomap_fragment>
	vec3 outgoingLight = reflectedLight.directDiffuse + reflectedLight.indirectDiffuse + reflectedLight.directSpecular + reflectedLight.indirectSpecular + totalEmissiveRadiance;
	#include <envmap_fragment>
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,Iv=`#define STANDARD
varying vec3 vViewPosition;
#ifdef USE_TRANSMISSION
	varying vec3 vWorldPosition;
#endif
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <shadowmap_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	vViewPosition = - mvPosition.xyz;
	#include <worldpos_vertex>
	#include <shadowmap_vertex>
	#include <fog_vertex>
#ifdef USE_TRANSMISSION
	vWorldPosition = worldPosition.xyz;
#endif
}`,Lv=`#define STANDARD
#ifdef PHYSICAL
	#define IOR
	#define USE_SPECULAR
#endif
uniform vec3 diffuse;
uniform vec3 emissive;
uniform float roughness;
uniform float metalness;
uniform float opacity;
#ifdef IOR
	uniform float ior;
#endif
#ifdef USE_SPECULAR
	uniform float specularIntensity;
	uniform vec3 specularColor;
	#ifdef USE_SPECULAR_COLORMAP
		uniform sampler2D specularColorMap;
	#endif
	#ifdef USE_SPECULAR_INTENSITYMAP
		uniform sampler2D specularIntensityMap;
	#endif
#endif
#ifdef USE_CLEARCOAT
	uniform float clearcoat;
	uniform float clearcoatRoughness;
#endif
#ifdef USE_DIFFUSE_ROUGHNESS
	uniform float diffuseRoughness;
	#ifdef USE_DIFFUSE_ROUGHNESSMAP
		uniform sampler2D diffuseRoughnessMap;
	#endif
#endif
#ifdef USE_DISPERSION
	uniform float dispersion;
#endif
#ifdef USE_RETROREFLECTION
	uniform float retroreflectivity;
#endif
#ifdef USE_IRIDESCENCE
	uniform float iridescence;
	uniform float iridescenceIOR;
	uniform float iridescenceThicknessMinimum;
	uniform float iridescenceThicknessMaximum;
#endif
#ifdef USE_SHEEN
	uniform vec3 sheenColor;
	uniform float sheenRoughness;
	#ifdef USE_SHEEN_COLORMAP
		uniform sampler2D sheenColorMap;
	#endif
	#ifdef USE_SHEEN_ROUGHNESSMAP
		uniform sampler2D sheenRoughnessMap;
	#endif
#endif
#ifdef USE_ANISOTROPY
	uniform vec2 anisotropyVector;
	#ifdef USE_ANISOTROPYMAP
		uniform sampler2D anisotropyMap;
	#endif
#endif
varying vec3 vViewPosition;
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <aomap_pars_fragment>
#include <lightmap_pars_fragment>
#include <emissivemap_pars_fragment>
#include <iridescence_fragment>
#include <envmap_common_pars_fragment>
#include <envmap_physical_pars_fragment>
#include <fog_pars_fragment>
#include <lights_pars_begin>
#include <normal_pars_fragment>
#include <lights_physical_pars_fragment>
#include <transmission_pars_fragment>
#include <shadowmap_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <clearcoat_pars_fragment>
#include <iridescence_pars_fragment>
#include <roughnessmap_pars_fragment>
#include <metalnessmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	ReflectedLight reflectedLight = ReflectedLight( vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ) );
	vec3 totalEmissiveRadiance = emissive;
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <roughnessmap_fragment>
	#include <metalnessmap_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	#include <clearcoat_normal_fragment_begin>
	#include <clearcoat_normal_fragment_maps>
	#include <emissivemap_fragment>
	#include <lights_physical_fragment>
	#include <lights_fragment_begin>
	#include <lights_fragment_maps>
	#include <lights_fragment_end>
	#include <aomap_fragment>
	vec3 totalDiffuse = reflectedLight.directDiffuse + reflectedLight.indirectDiffuse;
	vec3 totalSpecular = reflectedLight.directSpecular + reflectedLight.indirectSpecular;
	#include <transmission_fragment>
	vec3 outgoingLight = totalDiffuse + totalSpecular + totalEmissiveRadiance;
	#ifdef USE_SHEEN
 
		outgoingLight = outgoingLight + sheenSpecularDirect + sheenSpecularIndirect;
 
 	#endif
	#ifdef USE_CLEARCOAT
		float dotNVcc = saturate( dot( geometryClearcoatNormal, geometryViewDir ) );
		vec3 Fcc = F_Schlick( material.clearcoatF0, material.clearcoatF90, dotNVcc );
		outgoingLight = outgoingLight * ( 1.0 - material.clearcoat * Fcc ) + ( clearcoatSpecularDirect + clearcoatSpecularIndirect ) * material.clearcoat;
	#endif
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,Dv=`#define TOON
varying vec3 vViewPosition;
#include <common>
#include <batching_pars_vertex>
#include <uv_pars_vertex>
#include <displacementmap_pars_vertex>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <normal_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <shadowmap_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <normal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <displacementmap_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	vViewPosition = - mvPosition.xyz;
	#include <worldpos_vertex>
	#include <shadowmap_vertex>
	#include <fog_vertex>
}`,Nv=`#define TOON
uniform vec3 diffuse;
uniform vec3 emissive;
uniform float opacity;
#include <common>
#include <dithering_pars_fragment>
#include <color_pars_fragment>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <aomap_pars_fragment>
#include <lightmap_pars_fragment>
#include <emissivemap_pars_fragment>
#include <gradientmap_pars_fragment>
#include <fog_pars_fragment>
#include <bsdfs>
#include <lights_pars_begin>
#include <normal_pars_fragment>
#include <lights_toon_pars_fragment>
#include <shadowmap_pars_fragment>
#include <bumpmap_pars_fragment>
#include <normalmap_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	ReflectedLight reflectedLight = ReflectedLight( vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ), vec3( 0.0 ) );
	vec3 totalEmissiveRadiance = emissive;
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <color_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	#include <normal_fragment_begin>
	#include <normal_fragment_maps>
	#include <emissivemap_fragment>
	#include <lights_toon_fragment>
	#include <lights_fragment_begin>
	#include <lights_fragment_maps>
	#include <lights_fragment_end>
	#include <aomap_fragment>
	vec3 outgoingLight = reflectedLight.directDiffuse + reflectedLight.indirectDiffuse + totalEmissiveRadiance;
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
	#include <dithering_fragment>
}`,Uv=`uniform float size;
uniform float scale;
#include <common>
#include <color_pars_vertex>
#include <fog_pars_vertex>
#include <morphtarget_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
#ifdef USE_POINTS_UV
	varying vec2 vUv;
	uniform mat3 uvTransform;
#endif
void main() {
	#ifdef USE_POINTS_UV
		vUv = ( uvTransform * vec3( uv, 1 ) ).xy;
	#endif
	#include <color_vertex>
	#include <morphinstance_vertex>
	#include <morphcolor_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <project_vertex>
	gl_PointSize = size;
	#ifdef USE_SIZEATTENUATION
		bool isPerspective = isPerspectiveMatrix( projectionMatrix );
		if ( isPerspective ) gl_PointSize *= ( scale / - mvPosition.z );
	#endif
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	#include <worldpos_vertex>
	#include <fog_vertex>
}`,Fv=`uniform vec3 diffuse;
uniform float opacity;
#include <common>
#include <color_pars_fragment>
#include <map_particle_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <fog_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	vec3 outgoingLight = vec3( 0.0 );
	#include <logdepthbuf_fragment>
	#include <map_particle_fragment>
	#include <color_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	outgoingLight = diffuseColor.rgb;
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
}`,Ov=`#include <common>
#include <batching_pars_vertex>
#include <fog_pars_vertex>
#include <morphtarget_pars_vertex>
#include <skinning_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <shadowmap_pars_vertex>
void main() {
	#include <batching_vertex>
	#include <beginnormal_vertex>
	#include <morphinstance_vertex>
	#include <morphnormal_vertex>
	#include <skinbase_vertex>
	#include <skinnormal_vertex>
	#include <defaultnormal_vertex>
	#include <begin_vertex>
	#include <morphtarget_vertex>
	#include <skinning_vertex>
	#include <project_vertex>
	#include <logdepthbuf_vertex>
	#include <worldpos_vertex>
	#include <shadowmap_vertex>
	#include <fog_vertex>
}`,Bv=`uniform vec3 color;
uniform float opacity;
#include <common>
#include <fog_pars_fragment>
#include <bsdfs>
#include <lights_pars_begin>
#include <logdepthbuf_pars_fragment>
#include <shadowmap_pars_fragment>
#include <shadowmask_pars_fragment>
void main() {
	#include <logdepthbuf_fragment>
	gl_FragColor = vec4( color, opacity * ( 1.0 - getShadowMask() ) );
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
	#include <premultiplied_alpha_fragment>
}`,kv=`uniform float rotation;
uniform vec2 center;
#include <common>
#include <uv_pars_vertex>
#include <fog_pars_vertex>
#include <logdepthbuf_pars_vertex>
#include <clipping_planes_pars_vertex>
void main() {
	#include <uv_vertex>
	vec4 mvPosition = modelViewMatrix[ 3 ];
	vec2 scale = vec2( length( modelMatrix[ 0 ].xyz ), length( modelMatrix[ 1 ].xyz ) );
	#ifndef USE_SIZEATTENUATION
		bool isPerspective = isPerspectiveMatrix( projectionMatrix );
		if ( isPerspective ) scale *= - mvPosition.z;
	#endif
	vec2 alignedPosition = ( position.xy - ( center - vec2( 0.5 ) ) ) * scale;
	vec2 rotatedPosition;
	rotatedPosition.x = cos( rotation ) * alignedPosition.x - sin( rotation ) * alignedPosition.y;
	rotatedPosition.y = sin( rotation ) * alignedPosition.x + cos( rotation ) * alignedPosition.y;
	mvPosition.xy += rotatedPosition;
	gl_Position = projectionMatrix * mvPosition;
	#include <logdepthbuf_vertex>
	#include <clipping_planes_vertex>
	#include <fog_vertex>
}`,zv=`uniform vec3 diffuse;
uniform float opacity;
#include <common>
#include <uv_pars_fragment>
#include <map_pars_fragment>
#include <alphamap_pars_fragment>
#include <alphatest_pars_fragment>
#include <alphahash_pars_fragment>
#include <fog_pars_fragment>
#include <logdepthbuf_pars_fragment>
#include <clipping_planes_pars_fragment>
void main() {
	vec4 diffuseColor = vec4( diffuse, opacity );
	#include <clipping_planes_fragment>
	vec3 outgoingLight = vec3( 0.0 );
	#include <logdepthbuf_fragment>
	#include <map_fragment>
	#include <alphamap_fragment>
	#include <alphatest_fragment>
	#include <alphahash_fragment>
	outgoingLight = diffuseColor.rgb;
	#include <opaque_fragment>
	#include <tonemapping_fragment>
	#include <colorspace_fragment>
	#include <fog_fragment>
}`,le={alphahash_fragment:lx,alphahash_pars_fragment:cx,alphamap_fragment:hx,alphamap_pars_fragment:ux,alphatest_fragment:fx,alphatest_pars_fragment:dx,aomap_fragment:px,aomap_pars_fragment:mx,batching_pars_vertex:gx,batching_vertex:_x,begin_vertex:xx,beginnormal_vertex:yx,bsdfs:vx,iridescence_fragment:Sx,bumpmap_pars_fragment:Mx,clipping_planes_fragment:bx,clipping_planes_pars_fragment:wx,clipping_planes_pars_vertex:Ex,clipping_planes_vertex:Tx,color_fragment:Ax,color_pars_fragment:Rx,color_pars_vertex:Cx,color_vertex:Px,common:Ix,defaultnormal_vertex:Lx,displacementmap_pars_vertex:Dx,displacementmap_vertex:Nx,emissivemap_fragment:Ux,emissivemap_pars_fragment:Fx,colorspace_fragment:Ox,colorspace_pars_fragment:Bx,envmap_fragment:kx,envmap_common_pars_fragment:zx,envmap_pars_fragment:Vx,envmap_pars_vertex:Gx,envmap_physical_pars_fragment:Qx,envmap_vertex:Hx,fog_vertex:Wx,fog_pars_vertex:Xx,fog_fragment:qx,fog_pars_fragment:Yx,gradientmap_pars_fragment:Zx,lightmap_pars_fragment:$x,lights_lambert_fragment:Jx,lights_lambert_pars_fragment:Kx,lights_pars_begin:jx,lights_toon_fragment:ty,lights_toon_pars_fragment:ey,lights_phong_fragment:ny,lights_phong_pars_fragment:iy,lights_physical_fragment:sy,lights_physical_pars_fragment:ry,lights_fragment_begin:oy,lights_fragment_maps:ay,lights_fragment_end:ly,lightprobes_pars_fragment:cy,logdepthbuf_fragment:hy,logdepthbuf_pars_fragment:uy,logdepthbuf_pars_vertex:fy,logdepthbuf_vertex:dy,map_fragment:py,map_pars_fragment:my,map_particle_fragment:gy,map_particle_pars_fragment:_y,metalnessmap_fragment:xy,metalnessmap_pars_fragment:yy,morphinstance_vertex:vy,morphcolor_vertex:Sy,morphnormal_vertex:My,morphtarget_pars_vertex:by,morphtarget_vertex:wy,normal_fragment_begin:Ey,normal_fragment_maps:Ty,normal_pars_fragment:Ay,normal_pars_vertex:Ry,normal_vertex:Cy,normalmap_pars_fragment:Py,clearcoat_normal_fragment_begin:Iy,clearcoat_normal_fragment_maps:Ly,clearcoat_pars_fragment:Dy,iridescence_pars_fragment:Ny,opaque_fragment:Uy,packing:Fy,premultiplied_alpha_fragment:Oy,project_vertex:By,dithering_fragment:ky,dithering_pars_fragment:zy,roughnessmap_fragment:Vy,roughnessmap_pars_fragment:Gy,shadowmap_pars_fragment:Hy,shadowmap_pars_vertex:Wy,shadowmap_vertex:Xy,shadowmask_pars_fragment:qy,skinbase_vertex:Yy,skinning_pars_vertex:Zy,skinning_vertex:$y,skinnormal_vertex:Jy,specularmap_fragment:Ky,specularmap_pars_fragment:jy,tonemapping_fragment:Qy,tonemapping_pars_fragment:tv,transmission_fragment:ev,transmission_pars_fragment:nv,uv_pars_fragment:iv,uv_pars_vertex:sv,uv_vertex:rv,worldpos_vertex:ov,background_vert:av,background_frag:lv,backgroundCube_vert:cv,backgroundCube_frag:hv,cube_vert:uv,cube_frag:fv,depth_vert:dv,depth_frag:pv,distance_vert:mv,distance_frag:gv,equirect_vert:_v,equirect_frag:xv,linedashed_vert:yv,linedashed_frag:vv,meshbasic_vert:Sv,meshbasic_frag:Mv,meshlambert_vert:bv,meshlambert_frag:wv,meshmatcap_vert:Ev,meshmatcap_frag:Tv,meshnormal_vert:Av,meshnormal_frag:Rv,meshphong_vert:Cv,meshphong_frag:Pv,meshphysical_vert:Iv,meshphysical_frag:Lv,meshtoon_vert:Dv,meshtoon_frag:Nv,points_vert:Uv,points_frag:Fv,shadow_vert:Ov,shadow_frag:Bv,sprite_vert:kv,sprite_frag:zv},It={common:{diffuse:{value:new ae(16777215)},opacity:{value:1},map:{value:null},mapTransform:{value:new Qt},alphaMap:{value:null},alphaMapTransform:{value:new Qt},alphaTest:{value:0}},specularmap:{specularMap:{value:null},specularMapTransform:{value:new Qt}},envmap:{envMap:{value:null},envMapRotation:{value:new Qt},reflectivity:{value:1},ior:{value:1.5},refractionRatio:{value:.98},dfgLUT:{value:null}},aomap:{aoMap:{value:null},aoMapIntensity:{value:1},aoMapTransform:{value:new Qt}},lightmap:{lightMap:{value:null},lightMapIntensity:{value:1},lightMapTransform:{value:new Qt}},bumpmap:{bumpMap:{value:null},bumpMapTransform:{value:new Qt},bumpScale:{value:1}},normalmap:{normalMap:{value:null},normalMapTransform:{value:new Qt},normalScale:{value:new Jt(1,1)}},displacementmap:{displacementMap:{value:null},displacementMapTransform:{value:new Qt},displacementScale:{value:1},displacementBias:{value:0}},emissivemap:{emissiveMap:{value:null},emissiveMapTransform:{value:new Qt}},metalnessmap:{metalnessMap:{value:null},metalnessMapTransform:{value:new Qt}},roughnessmap:{roughnessMap:{value:null},roughnessMapTransform:{value:new Qt}},gradientmap:{gradientMap:{value:null}},fog:{fogDensity:{value:25e-5},fogNear:{value:1},fogFar:{value:2e3},fogColor:{value:new ae(16777215)}},lights:{ambientLightColor:{value:[]},lightProbe:{value:[]},sunLights:{value:[],properties:{direction:{},color:{}}},sunLightShadows:{value:[],properties:{shadowIntensity:1,shadowBias:{},shadowNormalBias:{},shadowRadius:{},shadowMapSize:{}}},sunShadowMatrix:{value:[]},sunShadowCascade:{value:[]},directionalLights:{value:[],properties:{direction:{},color:{}}},directionalLightShadows:{value:[],properties:{shadowIntensity:1,shadowBias:{},shadowNormalBias:{},shadowRadius:{},shadowMapSize:{}}},directionalShadowMatrix:{value:[]},spotLights:{value:[],properties:{color:{},position:{},direction:{},distance:{},coneCos:{},penumbraCos:{},decay:{}}},spotLightShadows:{value:[],properties:{shadowIntensity:1,shadowBias:{},shadowNormalBias:{},shadowRadius:{},shadowMapSize:{}}},spotLightMap:{value:[]},spotLightMatrix:{value:[]},pointLights:{value:[],properties:{color:{},position:{},decay:{},distance:{}}},pointLightShadows:{value:[],properties:{shadowIntensity:1,shadowBias:{},shadowNormalBias:{},shadowRadius:{},shadowMapSize:{},shadowCameraNear:{},shadowCameraFar:{}}},pointShadowMatrix:{value:[]},hemisphereLights:{value:[],properties:{direction:{},skyColor:{},groundColor:{}}},rectAreaLights:{value:[],properties:{color:{},position:{},width:{},height:{}}},ltc_1:{value:null},ltc_2:{value:null},probesSH:{value:[]},probesMin:{value:[]},probesMax:{value:[]},probesResolution:{value:[]}},points:{diffuse:{value:new ae(16777215)},opacity:{value:1},size:{value:1},scale:{value:1},map:{value:null},alphaMap:{value:null},alphaMapTransform:{value:new Qt},alphaTest:{value:0},uvTransform:{value:new Qt}},sprite:{diffuse:{value:new ae(16777215)},opacity:{value:1},center:{value:new Jt(.5,.5)},rotation:{value:0},map:{value:null},mapTransform:{value:new Qt},alphaMap:{value:null},alphaMapTransform:{value:new Qt},alphaTest:{value:0}}},Gi={basic:{uniforms:Ln([It.common,It.specularmap,It.envmap,It.aomap,It.lightmap,It.fog]),vertexShader:le.meshbasic_vert,fragmentShader:le.meshbasic_frag},lambert:{uniforms:Ln([It.common,It.specularmap,It.envmap,It.aomap,It.lightmap,It.emissivemap,It.bumpmap,It.normalmap,It.displacementmap,It.fog,It.lights,{emissive:{value:new ae(0)},envMapIntensity:{value:1}}]),vertexShader:le.meshlambert_vert,fragmentShader:le.meshlambert_frag},phong:{uniforms:Ln([It.common,It.specularmap,It.envmap,It.aomap,It.lightmap,It.emissivemap,It.bumpmap,It.normalmap,It.displacementmap,It.fog,It.lights,{emissive:{value:new ae(0)},specular:{value:new ae(1118481)},shininess:{value:30},envMapIntensity:{value:1}}]),vertexShader:le.meshphong_vert,fragmentShader:le.meshphong_frag},standard:{uniforms:Ln([It.common,It.envmap,It.aomap,It.lightmap,It.emissivemap,It.bumpmap,It.normalmap,It.displacementmap,It.roughnessmap,It.metalnessmap,It.fog,It.lights,{emissive:{value:new ae(0)},roughness:{value:1},metalness:{value:0},envMapIntensity:{value:1}}]),vertexShader:le.meshphysical_vert,fragmentShader:le.meshphysical_frag},toon:{uniforms:Ln([It.common,It.aomap,It.lightmap,It.emissivemap,It.bumpmap,It.normalmap,It.displacementmap,It.gradientmap,It.fog,It.lights,{emissive:{value:new ae(0)}}]),vertexShader:le.meshtoon_vert,fragmentShader:le.meshtoon_frag},matcap:{uniforms:Ln([It.common,It.bumpmap,It.normalmap,It.displacementmap,It.fog,{matcap:{value:null}}]),vertexShader:le.meshmatcap_vert,fragmentShader:le.meshmatcap_frag},points:{uniforms:Ln([It.points,It.fog]),vertexShader:le.points_vert,fragmentShader:le.points_frag},dashed:{uniforms:Ln([It.common,It.fog,{scale:{value:1},dashSize:{value:1},totalSize:{value:2}}]),vertexShader:le.linedashed_vert,fragmentShader:le.linedashed_frag},depth:{uniforms:Ln([It.common,It.displacementmap]),vertexShader:le.depth_vert,fragmentShader:le.depth_frag},normal:{uniforms:Ln([It.common,It.bumpmap,It.normalmap,It.displacementmap,{opacity:{value:1}}]),vertexShader:le.meshnormal_vert,fragmentShader:le.meshnormal_frag},sprite:{uniforms:Ln([It.sprite,It.fog]),vertexShader:le.sprite_vert,fragmentShader:le.sprite_frag},background:{uniforms:{uvTransform:{value:new Qt},t2D:{value:null},backgroundIntensity:{value:1}},vertexShader:le.background_vert,fragmentShader:le.background_frag},backgroundCube:{uniforms:{envMap:{value:null},backgroundBlurriness:{value:0},backgroundIntensity:{value:1},backgroundRotation:{value:new Qt}},vertexShader:le.backgroundCube_vert,fragmentShader:le.backgroundCube_frag},cube:{uniforms:{tCube:{value:null},tFlip:{value:-1},opacity:{value:1}},vertexShader:le.cube_vert,fragmentShader:le.cube_frag},equirect:{uniforms:{tEquirect:{value:null}},vertexShader:le.equirect_vert,fragmentShader:le.equirect_frag},distance:{uniforms:Ln([It.common,It.displacementmap,{referencePosition:{value:new W},nearDistance:{value:1},farDistance:{value:1e3}}]),vertexShader:le.distance_vert,fragmentShader:le.distance_frag},shadow:{uniforms:Ln([It.lights,It.fog,{color:{value:new ae(0)},opacity:{value:1}}]),vertexShader:le.shadow_vert,fragmentShader:le.shadow_frag}};Gi.physical={uniforms:Ln([Gi.standard.uniforms,{clearcoat:{value:0},clearcoatMap:{value:null},clearcoatMapTransform:{value:new Qt},clearcoatNormalMap:{value:null},clearcoatNormalMapTransform:{value:new Qt},clearcoatNormalScale:{value:new Jt(1,1)},clearcoatRoughness:{value:0},clearcoatRoughnessMap:{value:null},clearcoatRoughnessMapTransform:{value:new Qt},diffuseRoughness:{value:0},diffuseRoughnessMap:{value:null},diffuseRoughnessMapTransform:{value:new Qt},dispersion:{value:0},retroreflectivity:{value:0},iridescence:{value:0},iridescenceMap:{value:null},iridescenceMapTransform:{value:new Qt},iridescenceIOR:{value:1.3},iridescenceThicknessMinimum:{value:100},iridescenceThicknessMaximum:{value:400},iridescenceThicknessMap:{value:null},iridescenceThicknessMapTransform:{value:new Qt},sheen:{value:0},sheenColor:{value:new ae(0)},sheenColorMap:{value:null},sheenColorMapTransform:{value:new Qt},sheenRoughness:{value:1},sheenRoughnessMap:{value:null},sheenRoughnessMapTransform:{value:new Qt},transmission:{value:0},transmissionMap:{value:null},transmissionMapTransform:{value:new Qt},transmissionSamplerSize:{value:new Jt},transmissionSamplerMap:{value:null},thickness:{value:0},thicknessMap:{value:null},thicknessMapTransform:{value:new Qt},attenuationDistance:{value:0},attenuationColor:{value:new ae(0)},specularColor:{value:new ae(1,1,1)},specularColorMap:{value:null},specularColorMapTransform:{value:new Qt},specularIntensity:{value:1},specularIntensityMap:{value:null},specularIntensityMapTransform:{value:new Qt},anisotropyVector:{value:new Jt},anisotropyMap:{value:null},anisotropyMapTransform:{value:new Qt}}]),vertexShader:le.meshphysical_vert,fragmentShader:le.meshphysical_frag};var Mc={r:0,b:0,g:0},Vv=new Se,wm=new Qt;wm.set(-1,0,0,0,1,0,0,0,1);function Gv(i,t,e,n,s,r){let o=new ae(0),a=s===!0?0:1,l,c,f=null,u=0,h=null;function p(v){let C=v.isScene===!0?v.background:null;if(C&&C.isTexture){let M=v.backgroundBlurriness>0;C=t.get(C,M)}return C}function x(v){let C=!1,M=p(v);M===null?m(o,a):M&&M.isColor&&(m(M,1),C=!0);let P=i.xr.getEnvironmentBlendMode();P==="additive"?e.buffers.color.setClear(0,0,0,1,r):P==="alpha-blend"&&e.buffers.color.setClear(0,0,0,0,r),(i.autoClear||C)&&(e.buffers.depth.setTest(!0),e.buffers.depth.setMask(!0),e.buffers.color.setMask(!0),i.clear(i.autoClearColor,i.autoClearDepth,i.autoClearStencil))}function w(v,C){let M=p(C);M&&M.isCubeTexture?(c===void 0&&(c=new In(new $r(1,1,1),new pi({name:"BackgroundCubeMaterial",uniforms:er(Gi.backgroundCube.uniforms),vertexShader:Gi.backgroundCube.vertexShader,fragmentShader:Gi.backgroundCube.fragmentShader,side:Gn,depthTest:!1,depthWrite:!1,fog:!1,allowOverride:!1})),c.geometry.deleteAttribute("normal"),c.geometry.deleteAttribute("uv"),c.onBeforeRender=function(P,T,_){this.matrixWorld.copyPosition(_.matrixWorld)},Object.defineProperty(c.material,"envMap",{get:function(){return this.uniforms.envMap.value}}),n.update(c)),c.material.uniforms.envMap.value=M,c.material.uniforms.backgroundBlurriness.value=C.backgroundBlurriness,c.material.uniforms.backgroundIntensity.value=C.backgroundIntensity,c.material.uniforms.backgroundRotation.value.setFromMatrix4(Vv.makeRotationFromEuler(C.backgroundRotation)).transpose(),M.isRenderTargetTexture===!1&&c.material.uniforms.backgroundRotation.value.premultiply(wm),c.material.toneMapped=ge.getTransfer(M.colorSpace)!==Te,(f!==M||u!==M.version||h!==i.toneMapping)&&(c.material.needsUpdate=!0,f=M,u=M.version,h=i.toneMapping),c.layers.enableAll(),v.unshift(c,c.geometry,c.material,0,0,null)):M&&M.isTexture&&(l===void 0&&(l=new In(new Zs(2,2),new pi({name:"BackgroundMaterial",uniforms:er(Gi.background.uniforms),vertexShader:Gi.background.vertexShader,fragmentShader:Gi.background.fragmentShader,side:Is,depthTest:!1,depthWrite:!1,fog:!1,allowOverride:!1})),l.geometry.deleteAttribute("normal"),Object.defineProperty(l.material,"map",{get:function(){return this.uniforms.t2D.value}}),n.update(l)),l.material.uniforms.t2D.value=M,l.material.uniforms.backgroundIntensity.value=C.backgroundIntensity,l.material.toneMapped=ge.getTransfer(M.colorSpace)!==Te,M.matrixAutoUpdate===!0&&M.updateMatrix(),l.material.uniforms.uvTransform.value.copy(M.matrix),(f!==M||u!==M.version||h!==i.toneMapping)&&(l.material.needsUpdate=!0,f=M,u=M.version,h=i.toneMapping),l.layers.enableAll(),v.unshift(l,l.geometry,l.material,0,0,null))}function m(v,C){v.getRGB(Mc,Au(i)),e.buffers.color.setClear(Mc.r,Mc.g,Mc.b,C,r)}function d(){c!==void 0&&(c.geometry.dispose(),c.material.dispose(),c=void 0),l!==void 0&&(l.geometry.dispose(),l.material.dispose(),l=void 0)}return{getClearColor:function(){return o},setClearColor:function(v,C=1){o.set(v),a=C,m(o,a)},getClearAlpha:function(){return a},setClearAlpha:function(v){a=v,m(o,a)},render:x,addToRenderList:w,dispose:d}}function Hv(i,t){let e=i.getParameter(i.MAX_VERTEX_ATTRIBS),n={},s=h(null),r=s,o=!1;function a(D,k,G,L,H){let Y=!1,V=u(D,L,G,k);r!==V&&(r=V,c(r.object)),Y=p(D,L,G,H),Y&&x(D,L,G,H),H!==null&&t.update(H,i.ELEMENT_ARRAY_BUFFER),(Y||o)&&(o=!1,M(D,k,G,L),H!==null&&i.bindBuffer(i.ELEMENT_ARRAY_BUFFER,t.get(H).buffer))}function l(){return i.createVertexArray()}function c(D){return i.bindVertexArray(D)}function f(D){return i.deleteVertexArray(D)}function u(D,k,G,L){let H=L.wireframe===!0,Y=n[k.id];Y===void 0&&(Y={},n[k.id]=Y);let V=D.isInstancedMesh===!0?D.id:0,lt=Y[V];lt===void 0&&(lt={},Y[V]=lt);let J=lt[G.id];J===void 0&&(J={},lt[G.id]=J);let j=J[H];return j===void 0&&(j=h(l()),J[H]=j),j}function h(D){let k=[],G=[],L=[];for(let H=0;H<e;H++)k[H]=0,G[H]=0,L[H]=0;return{geometry:null,program:null,wireframe:!1,newAttributes:k,enabledAttributes:G,attributeDivisors:L,object:D,attributes:{},index:null}}function p(D,k,G,L){let H=r.attributes,Y=k.attributes,V=0,lt=G.getAttributes();for(let J in lt)if(lt[J].location>=0){let it=H[J],ut=Y[J];if(ut===void 0&&(J==="instanceMatrix"&&D.instanceMatrix&&(ut=D.instanceMatrix),J==="instanceColor"&&D.instanceColor&&(ut=D.instanceColor)),it===void 0||it.attribute!==ut||ut&&it.data!==ut.data)return!0;V++}return r.attributesNum!==V||r.index!==L}function x(D,k,G,L){let H={},Y=k.attributes,V=0,lt=G.getAttributes();for(let J in lt)if(lt[J].location>=0){let it=Y[J];it===void 0&&(J==="instanceMatrix"&&D.instanceMatrix&&(it=D.instanceMatrix),J==="instanceColor"&&D.instanceColor&&(it=D.instanceColor));let ut={};ut.attribute=it,it&&it.data&&(ut.data=it.data),H[J]=ut,V++}r.attributes=H,r.attributesNum=V,r.index=L}function w(){let D=r.newAttributes;for(let k=0,G=D.length;k<G;k++)D[k]=0}function m(D){d(D,0)}function d(D,k){let G=r.newAttributes,L=r.enabledAttributes,H=r.attributeDivisors;G[D]=1,L[D]===0&&(i.enableVertexAttribArray(D),L[D]=1),H[D]!==k&&(i.vertexAttribDivisor(D,k),H[D]=k)}function v(){let D=r.newAttributes,k=r.enabledAttributes;for(let G=0,L=k.length;G<L;G++)k[G]!==D[G]&&(i.disableVertexAttribArray(G),k[G]=0)}function C(D,k,G,L,H,Y,V){V===!0?i.vertexAttribIPointer(D,k,G,H,Y):i.vertexAttribPointer(D,k,G,L,H,Y)}function M(D,k,G,L){w();let H=L.attributes,Y=G.getAttributes(),V=k.defaultAttributeValues;for(let lt in Y){let J=Y[lt];if(J.location>=0){let j=H[lt];if(j===void 0&&(lt==="instanceMatrix"&&D.instanceMatrix&&(j=D.instanceMatrix),lt==="instanceColor"&&D.instanceColor&&(j=D.instanceColor)),j!==void 0){let it=j.normalized,ut=j.itemSize,ht=t.get(j);if(ht===void 0)continue;let Q=ht.buffer,pt=ht.type,_t=ht.bytesPerElement,Tt=pt===i.INT||pt===i.UNSIGNED_INT||j.gpuType===Bl;if(j.isInterleavedBufferAttribute){let St=j.data,Gt=St.isInterleavedBuffer===!0?St.stride:St.itemSize,ne=j.offset;if(St.isInstancedInterleavedBuffer||St.isInstancedBufferAttribute){for(let zt=0;zt<J.locationSize;zt++)d(J.location+zt,St.meshPerAttribute);D.isInstancedMesh!==!0&&L._maxInstanceCount===void 0&&(L._maxInstanceCount=St.meshPerAttribute*St.count)}else for(let zt=0;zt<J.locationSize;zt++)m(J.location+zt);i.bindBuffer(i.ARRAY_BUFFER,Q);for(let zt=0;zt<J.locationSize;zt++)C(J.location+zt,ut/J.locationSize,pt,it,Gt*_t,(ne+ut/J.locationSize*zt)*_t,Tt)}else{if(j.isInstancedBufferAttribute){for(let St=0;St<J.locationSize;St++)d(J.location+St,j.meshPerAttribute);D.isInstancedMesh!==!0&&L._maxInstanceCount===void 0&&(L._maxInstanceCount=j.meshPerAttribute*j.count)}else for(let St=0;St<J.locationSize;St++)m(J.location+St);i.bindBuffer(i.ARRAY_BUFFER,Q);for(let St=0;St<J.locationSize;St++)C(J.location+St,ut/J.locationSize,pt,it,ut*_t,ut/J.locationSize*St*_t,Tt)}}else if(V!==void 0){let it=V[lt];if(it!==void 0)switch(it.length){case 2:i.vertexAttrib2fv(J.location,it);break;case 3:i.vertexAttrib3fv(J.location,it);break;case 4:i.vertexAttrib4fv(J.location,it);break;default:i.vertexAttrib1fv(J.location,it)}}}}v()}function P(){B();for(let D in n){let k=n[D];for(let G in k){let L=k[G];for(let H in L){let Y=L[H];for(let V in Y)f(Y[V].object),delete Y[V];delete L[H]}}delete n[D]}}function T(D){if(n[D.id]===void 0)return;let k=n[D.id];for(let G in k){let L=k[G];for(let H in L){let Y=L[H];for(let V in Y)f(Y[V].object),delete Y[V];delete L[H]}}delete n[D.id]}function _(D){for(let k in n){let G=n[k];for(let L in G){let H=G[L];if(H[D.id]===void 0)continue;let Y=H[D.id];for(let V in Y)f(Y[V].object),delete Y[V];delete H[D.id]}}}function E(D){for(let k in n){let G=n[k],L=D.isInstancedMesh===!0?D.id:0,H=G[L];if(H!==void 0){for(let Y in H){let V=H[Y];for(let lt in V)f(V[lt].object),delete V[lt];delete H[Y]}delete G[L],Object.keys(G).length===0&&delete n[k]}}}function B(){N(),o=!0,r!==s&&(r=s,c(r.object))}function N(){s.geometry=null,s.program=null,s.wireframe=!1}return{setup:a,reset:B,resetDefaultState:N,dispose:P,releaseStatesOfGeometry:T,releaseStatesOfObject:E,releaseStatesOfProgram:_,initAttributes:w,enableAttribute:m,disableUnusedAttributes:v}}function Wv(i,t,e){let n;function s(l){n=l}function r(l,c){i.drawArrays(n,l,c),e.update(c,n,1)}function o(l,c,f){f!==0&&(i.drawArraysInstanced(n,l,c,f),e.update(c,n,f))}function a(l,c,f){if(f===0)return;t.get("WEBGL_multi_draw").multiDrawArraysWEBGL(n,l,0,c,0,f);let h=0;for(let p=0;p<f;p++)h+=c[p];e.update(h,n,1)}this.setMode=s,this.render=r,this.renderInstances=o,this.renderMultiDraw=a}function Xv(i,t,e,n){let s;function r(){if(s!==void 0)return s;if(t.has("EXT_texture_filter_anisotropic")===!0){let _=t.get("EXT_texture_filter_anisotropic");s=i.getParameter(_.MAX_TEXTURE_MAX_ANISOTROPY_EXT)}else s=0;return s}function o(_){return!(_!==Ci&&n.convert(_)!==i.getParameter(i.IMPLEMENTATION_COLOR_READ_FORMAT))}function a(_){let E=_===Ri&&(t.has("EXT_color_buffer_half_float")||t.has("EXT_color_buffer_float"));return!(_!==Xn&&_!==gi&&!E&&n.convert(_)!==i.getParameter(i.IMPLEMENTATION_COLOR_READ_TYPE))}function l(_){if(_==="highp"){if(i.getShaderPrecisionFormat(i.VERTEX_SHADER,i.HIGH_FLOAT).precision>0&&i.getShaderPrecisionFormat(i.FRAGMENT_SHADER,i.HIGH_FLOAT).precision>0)return"highp";_="mediump"}return _==="mediump"&&i.getShaderPrecisionFormat(i.VERTEX_SHADER,i.MEDIUM_FLOAT).precision>0&&i.getShaderPrecisionFormat(i.FRAGMENT_SHADER,i.MEDIUM_FLOAT).precision>0?"mediump":"lowp"}let c=e.precision!==void 0?e.precision:"highp",f=l(c);f!==c&&(qt("WebGLRenderer:",c,"not supported, using",f,"instead."),c=f);let u=e.reversedDepthBuffer===!0&&t.has("EXT_clip_control"),h=e.logarithmicDepthBuffer===!0&&u===!1;e.reversedDepthBuffer===!0&&u===!1&&qt("WebGLRenderer: Unable to use reversed depth buffer due to missing EXT_clip_control extension. Fallback to default depth buffer."),e.logarithmicDepthBuffer===!0&&u===!0&&qt("WebGLRenderer: Logarithmic depth buffer is ignored when reversed depth buffer is enabled.");let p=i.getParameter(i.MAX_TEXTURE_IMAGE_UNITS),x=i.getParameter(i.MAX_VERTEX_TEXTURE_IMAGE_UNITS),w=i.getParameter(i.MAX_TEXTURE_SIZE),m=i.getParameter(i.MAX_CUBE_MAP_TEXTURE_SIZE),d=i.getParameter(i.MAX_VERTEX_ATTRIBS),v=i.getParameter(i.MAX_VERTEX_UNIFORM_VECTORS),C=i.getParameter(i.MAX_VARYING_VECTORS),M=i.getParameter(i.MAX_FRAGMENT_UNIFORM_VECTORS),P=i.getParameter(i.MAX_SAMPLES),T=i.getParameter(i.SAMPLES);return{isWebGL2:!0,getMaxAnisotropy:r,getMaxPrecision:l,textureFormatReadable:o,textureTypeReadable:a,precision:c,logarithmicDepthBuffer:h,reversedDepthBuffer:u,maxTextures:p,maxVertexTextures:x,maxTextureSize:w,maxCubemapSize:m,maxAttributes:d,maxVertexUniforms:v,maxVaryings:C,maxFragmentUniforms:M,maxSamples:P,samples:T}}function qv(i){let t=this,e=null,n=0,s=!1,r=!1,o=new si,a=new Qt,l={value:null,needsUpdate:!1};this.uniform=l,this.numPlanes=0,this.numIntersection=0,this.init=function(u,h){let p=u.length!==0||h||n!==0||s;return s=h,n=u.length,p},this.beginShadows=function(){r=!0,f(null)},this.endShadows=function(){r=!1},this.setGlobalState=function(u,h){e=f(u,h,0)},this.setState=function(u,h,p){let x=u.clippingPlanes,w=u.clipIntersection,m=u.clipShadows,d=i.get(u);if(!s||x===null||x.length===0||r&&!m)r?f(null):c();else{let v=r?0:n,C=v*4,M=d.clippingState||null;l.value=M,M=f(x,h,C,p);for(let P=0;P!==C;++P)M[P]=e[P];d.clippingState=M,this.numIntersection=w?this.numPlanes:0,this.numPlanes+=v}};function c(){l.value!==e&&(l.value=e,l.needsUpdate=n>0),t.numPlanes=n,t.numIntersection=0}function f(u,h,p,x){let w=u!==null?u.length:0,m=null;if(w!==0){if(m=l.value,x!==!0||m===null){let d=p+w*4,v=h.matrixWorldInverse;a.getNormalMatrix(v),(m===null||m.length<d)&&(m=new Float32Array(d));for(let C=0,M=p;C!==w;++C,M+=4)o.copy(u[C]).applyMatrix4(v,a),o.normal.toArray(m,M),m[M+3]=o.constant}l.value=m,l.needsUpdate=!0}return t.numPlanes=w,t.numIntersection=0,m}}var ha=class extends Vn{constructor(t=1,e={}){super(t,t,e),this.isWebGLCubeRenderTarget=!0;let n={width:t,height:t,depth:1},s=[n,n,n,n,n,n];this.texture=new Wo(s),this._setTextureOptions(e),this.texture.isRenderTargetTexture=!0}fromEquirectangularTexture(t,e){this.texture.type=e.type,this.texture.colorSpace=e.colorSpace,this.texture.generateMipmaps=e.generateMipmaps,this.texture.minFilter=e.minFilter,this.texture.magFilter=e.magFilter;let n={uniforms:{tEquirect:{value:null}},vertexShader:`

				varying vec3 vWorldDirection;

				vec3 transformDirection( in vec3 dir, in mat4 matrix ) {

					return normalize( ( matrix * vec4( dir, 0.0 ) ).xyz );

				}

				void main() {

					vWorldDirection = transformDirection( position, modelMatrix );

					#include <begin_vertex>
					#include <project_vertex>

				}
			`,fragmentShader:`

				uniform sampler2D tEquirect;

				varying vec3 vWorldDirection;

				#include <common>

				void main() {

					vec3 direction = normalize( vWorldDirection );

					vec2 sampleUV = equirectUv( direction );

					gl_FragColor = texture2D( tEquirect, sampleUV );

				}
			`},s=new $r(5,5,5),r=new pi({name:"CubemapFromEquirect",uniforms:er(n.uniforms),vertexShader:n.vertexShader,fragmentShader:n.fragmentShader,side:Gn,blending:Ks});r.uniforms.tEquirect.value=e;let o=new In(s,r),a=e.minFilter;return e.minFilter===rs&&(e.minFilter=zn),new Kr(1,10,this).update(t,o),e.minFilter=a,o.geometry.dispose(),o.material.dispose(),this}clear(t,e=!0,n=!0,s=!0){let r=t.getRenderTarget();for(let o=0;o<6;o++)t.setRenderTarget(this,o),t.clear(e,n,s);t.setRenderTarget(r)}},nm=256,Yv=3,Zv=20,Em=256,Tm=16,$v=3,Jv=new W,Kv=new ae,wc=class i{constructor(t){this._renderer=t,this._cubeSize=0,this._sourceTarget=null,this._cubeCamera=new Kr(1,10,null),this._boxMesh=new In(new $r(5,5,5),null),this._cubemapMaterial=null,this._equirectMaterial=null,this._blurMaterial=null,this._ggxMaterial=null,this._integrationMaterial=null}fromScene(t,e=0,n=.1,s=100,r={}){let{size:o=256,position:a=Jv}=r,l=this._renderer;this._setSize(o);let c=this._allocateTarget(),f=this._getSourceTarget(!0);e>0&&(f.texture.mipmapsAutoUpdate=!1);let u=l.autoClear,h=l.autoClearColor,p=l.autoClearDepth,x=l.autoClearStencil,w=t.background;l.autoClear=!0,l.autoClearColor=!0,l.autoClearDepth=!0,l.autoClearStencil=!0,w===null&&(t.background=l.getClearColor(Kv));let m=new Kr(n,s,f);return m.position.copy(a),m.update(l,t),l.autoClear=u,l.autoClearColor=h,l.autoClearDepth=p,l.autoClearStencil=x,t.background=w,e>0&&(f.texture.mipmapsAutoUpdate=!0,this._blur(c,e)),this._applyPMREM(c),c}fromEquirectangular(t,e=null){return this._fromTexture(t,e)}fromCubemap(t,e=null){return this._fromTexture(t,e)}compileCubemapShader(){this._cubemapMaterial===null&&(this._cubemapMaterial=rm(),this._compileMaterial(this._cubemapMaterial))}compileEquirectangularShader(){this._equirectMaterial===null&&(this._equirectMaterial=sm(),this._compileMaterial(this._equirectMaterial))}dispose(){this._sourceTarget!==null&&this._sourceTarget.dispose(),this._cubemapMaterial!==null&&this._cubemapMaterial.dispose(),this._equirectMaterial!==null&&this._equirectMaterial.dispose(),this._blurMaterial!==null&&this._blurMaterial.dispose(),this._ggxMaterial!==null&&this._ggxMaterial.dispose(),this._integrationMaterial!==null&&this._integrationMaterial.dispose(),this._boxMesh.geometry.dispose()}static lodToRoughness(t,e){return e>0?1-Math.sqrt(1-t/e):0}_setSize(t){this._cubeSize=Math.max(nm,wu(t))}_fromTexture(t,e){t.mapping===Qs||t.mapping===eo?this._setSize(t.image.length===0?nm:t.image[0].width||t.image[0].image.width):this._setSize(t.image.width/4);let n=e||this._allocateTarget();return this._textureToCubemap(t),this._applyPMREM(n),n}_allocateTarget(){let t=this._cubeSize,e=im(t,!1,!1),n=Math.log2(t)-Yv;for(let s=0;s<=n;s++)e.texture.mipmaps.push({width:t>>s,height:t>>s});return e.texture.name="PMREM",e.texture.isPMREMTexture=!0,e}_getSourceTarget(t=!1){let e=this._cubeSize,n=this._sourceTarget;return(n===null||n.width!==e||t&&n.depthBuffer===!1)&&(n!==null&&n.dispose(),this._sourceTarget=im(e,!0,t)),this._sourceTarget}_compileMaterial(t){this._boxMesh.material=t,this._renderer.compile(this._boxMesh,this._cubeCamera.children[0])}_renderCube(t,e,n){let s=this._boxMesh,r=this._cubeCamera;s.material=n,r.renderTarget=t,r.activeMipmapLevel=e;let o=t.width>>e;t.viewport.set(0,0,o,o),r.update(this._renderer,s),t.viewport.set(0,0,t.width,t.height)}_textureToCubemap(t){let e;t.mapping===Qs||t.mapping===eo?(this._cubemapMaterial===null&&(this._cubemapMaterial=rm()),e=this._cubemapMaterial,e.uniforms.flipEnvMap.value=t.isRenderTargetTexture===!1?-1:1):(this._equirectMaterial===null&&(this._equirectMaterial=sm()),e=this._equirectMaterial),e.uniforms.envMap.value=t,this._renderCube(this._getSourceTarget(),0,e)}_applyPMREM(t){this._ggxMaterial===null&&(this._ggxMaterial=jv(),this._integrationMaterial=Qv());let e=this._cubeSize,n=t.texture.mipmaps.length-1,s=this._ggxMaterial.uniforms;s.envMap.value=this._sourceTarget.texture;let r=this._integrationMaterial.uniforms;r.envMap.value=this._sourceTarget.texture,r.sourceLod.value=Math.log2(e/Tm);for(let o=0;o<=n;o++){let a=i.lodToRoughness(o,n);if(o>n-$v)r.roughness.value=a,this._renderCube(t,o,this._integrationMaterial);else{let l=a>0?Math.log2(e)+.5*Math.log2(6/(Em*Math.pow(a,4)))+.5:0;s.roughness.value=a,s.lodBias.value=l,this._renderCube(t,o,this._ggxMaterial)}}}_blur(t,e){this._blurMaterial===null&&(this._blurMaterial=tS());let n=this._blurMaterial,s=n.uniforms,r=this._sourceTarget;s.sigma.value=Math.min(e,Math.PI)/Math.SQRT2,s.envMap.value=r.texture,this._renderCube(t,0,n),s.envMap.value=t.texture,this._renderCube(r,0,n)}};function im(i,t,e){return new ha(i,{minFilter:rs,generateMipmaps:t,type:Ri,colorSpace:Uo,depthBuffer:e})}function ua(i,t,e){return new pi({name:i,uniforms:t,vertexShader:le.cube_vert,fragmentShader:e,side:Gn,blending:Ks,depthTest:!1,depthWrite:!1})}function jv(){return ua("PMREMGGXConvolution",{envMap:{value:null},roughness:{value:0},lodBias:{value:0}},`

		#define GGX_SAMPLES ${Em}u

		varying vec3 vWorldDirection;

		uniform samplerCube envMap;
		uniform float roughness;
		uniform float lodBias;

		#include <common>

		// Van der Corput radical inverse
		float radicalInverse_VdC( uint bits ) {

			bits = ( bits << 16u ) | ( bits >> 16u );
			bits = ( ( bits & 0x55555555u ) << 1u ) | ( ( bits & 0xAAAAAAAAu ) >> 1u );
			bits = ( ( bits & 0x33333333u ) << 2u ) | ( ( bits & 0xCCCCCCCCu ) >> 2u );
			bits = ( ( bits & 0x0F0F0F0Fu ) << 4u ) | ( ( bits & 0xF0F0F0F0u ) >> 4u );
			bits = ( ( bits & 0x00FF00FFu ) << 8u ) | ( ( bits & 0xFF00FF00u ) >> 8u );
			return float( bits ) * 2.3283064365386963e-10; // / 0x100000000

		}

		// Hammersley sequence
		vec2 hammersley( uint i, uint N ) {

			return vec2( float( i ) / float( N ), radicalInverse_VdC( i ) );

		}

		void main() {

			vec3 N = normalize( vWorldDirection );

			// For very low roughness, just sample the environment directly
			if ( roughness < 0.001 ) {

				gl_FragColor = vec4( textureLod( envMap, N, 0.0 ).rgb, 1.0 );
				return;

			}

			float alpha = roughness * roughness;
			float alpha2 = alpha * alpha;

			// Tangent space basis for VNDF sampling
			vec3 up = abs( N.z ) < 0.999 ? vec3( 0.0, 0.0, 1.0 ) : vec3( 1.0, 0.0, 0.0 );
			vec3 tangent = normalize( cross( up, N ) );
			vec3 bitangent = cross( N, tangent );

			vec3 prefilteredColor = vec3( 0.0 );
			float totalWeight = 0.0;

			for ( uint i = 0u; i < GGX_SAMPLES; i ++ ) {

				vec2 Xi = hammersley( i, GGX_SAMPLES );

				// With V = N, sample the reflected direction directly.
				float invQ = 1.0 / ( 1.0 - Xi.x + alpha2 * Xi.x );
				float NdotL = ( 1.0 - Xi.x - alpha2 * Xi.x ) * invQ;

				if ( NdotL > 0.0 ) {

					float phi = 2.0 * PI * Xi.y;
					float sinTheta = 2.0 * alpha * sqrt( Xi.x * ( 1.0 - Xi.x ) ) * invQ;
					vec3 L = N * NdotL + ( tangent * cos( phi ) + bitangent * sin( phi ) ) * sinTheta;

					// Match the source mip to the sample's solid angle. The terms
					// independent of the sample are precomputed in lodBias.
					float d = alpha2 * invQ;
					float lod = max( log2( d ) + lodBias, 0.0 );

					// Weight by NdotL for the split-sum approximation
					prefilteredColor += textureLod( envMap, L, lod ).rgb * NdotL;
					totalWeight += NdotL;

				}

			}

			gl_FragColor = vec4( prefilteredColor / totalWeight, 1.0 );

		}
	`)}function Qv(){return ua("PMREMGGXIntegration",{envMap:{value:null},roughness:{value:0},sourceLod:{value:0},sourceSize:{value:Tm}},`

		varying vec3 vWorldDirection;

		uniform samplerCube envMap;
		uniform float roughness;
		uniform float sourceLod;
		uniform int sourceSize;

		void main() {

			vec3 N = normalize( vWorldDirection );

			float alpha = roughness * roughness;
			float alpha2 = alpha * alpha;

			float texelSize = 2.0 / float( sourceSize );

			vec3 prefilteredColor = vec3( 0.0 );
			float totalWeight = 0.0;

			// Pair opposite texels: only the one in N's hemisphere contributes.
			for ( int face = 0; face < 3; face ++ ) {

				for ( int y = 0; y < sourceSize; y ++ ) {

					for ( int x = 0; x < sourceSize; x ++ ) {

						vec2 uv = ( vec2( x, y ) + 0.5 ) * texelSize - 1.0;
						vec3 texelDirection = face == 0 ? vec3( 1.0, uv ) : ( face == 1 ? vec3( uv.x, 1.0, uv.y ) : vec3( uv, 1.0 ) );

						float invDistance = inversesqrt( 1.0 + dot( uv, uv ) );
						float NdotL = dot( N, texelDirection );
						texelDirection *= NdotL < 0.0 ? - 1.0 : 1.0;
						NdotL = abs( NdotL ) * invDistance;

						// With V = N, NdotH squared is ( 1 + NdotL ) / 2. Common factors
						// in the GGX distribution and texel solid angle cancel when normalized.
						float d = 1.0 + alpha2 + ( alpha2 - 1.0 ) * NdotL;
						float weight = NdotL * invDistance * invDistance * invDistance / ( d * d );

						prefilteredColor += textureLod( envMap, texelDirection, sourceLod ).rgb * weight;
						totalWeight += weight;

					}

				}

			}

			gl_FragColor = vec4( prefilteredColor / totalWeight, 1.0 );

		}
	`)}function tS(){return ua("PMREMSphericalGaussianBlur",{envMap:{value:null},sigma:{value:0}},`

		#define SAMPLES ${Zv}
		#define GOLDEN_ANGLE 2.39996322973

		varying vec3 vWorldDirection;

		uniform samplerCube envMap;
		uniform float sigma;

		#include <common>

		void main() {

			vec3 outputDirection = normalize( vWorldDirection );

			vec3 up = abs( outputDirection.z ) < 0.999 ? vec3( 0.0, 0.0, 1.0 ) : vec3( 1.0, 0.0, 0.0 );
			vec3 tangent = normalize( cross( up, outputDirection ) );
			vec3 bitangent = cross( outputDirection, tangent );

			// Truncate the kernel at three standard deviations or at the antipode.
			float thetaMax = min( 3.0 * sigma, PI );
			float truncation = 1.0 - exp( - 0.5 * thetaMax * thetaMax / ( sigma * sigma ) );

			vec3 accumColor = vec3( 0.0 );
			float accumWeight = 0.0;

			for ( int i = 0; i < SAMPLES; i ++ ) {

				// Stratified inverse-CDF sampling of the Gaussian, placed on a golden-angle spiral.
				float stratum = ( float( i ) + 0.5 ) / float( SAMPLES );
				float theta = sigma * sqrt( - 2.0 * log( 1.0 - stratum * truncation ) );
				float phi = float( i ) * GOLDEN_ANGLE;

				vec3 offset = cos( phi ) * tangent + sin( phi ) * bitangent;
				vec3 sampleDirection = cos( theta ) * outputDirection + sin( theta ) * offset;

				// Correct the planar sample density to solid angle.
				float weight = sin( theta ) / theta;

				accumColor += weight * textureLod( envMap, sampleDirection, 0.0 ).rgb;
				accumWeight += weight;

			}

			gl_FragColor = vec4( accumColor / accumWeight, 1.0 );

		}
	`)}function sm(){return ua("PMREMEquirectangularToCubemap",{envMap:{value:null}},`

		varying vec3 vWorldDirection;

		uniform sampler2D envMap;

		#include <common>

		void main() {

			// Average four subpixel samples to preserve small, bright features.
			vec3 direction = normalize( vWorldDirection );
			vec3 dx = dFdx( direction ) * 0.25;
			vec3 dy = dFdy( direction ) * 0.25;

			vec3 color = textureLod( envMap, equirectUv( normalize( direction - dx - dy ) ), 0.0 ).rgb;
			color += textureLod( envMap, equirectUv( normalize( direction + dx - dy ) ), 0.0 ).rgb;
			color += textureLod( envMap, equirectUv( normalize( direction - dx + dy ) ), 0.0 ).rgb;
			color += textureLod( envMap, equirectUv( normalize( direction + dx + dy ) ), 0.0 ).rgb;
			gl_FragColor = vec4( color * 0.25, 1.0 );

		}
	`)}function rm(){return ua("PMREMCubemapToCubemap",{envMap:{value:null},flipEnvMap:{value:-1}},`

		varying vec3 vWorldDirection;

		uniform samplerCube envMap;
		uniform float flipEnvMap;

		void main() {

			gl_FragColor = vec4( textureCube( envMap, vec3( flipEnvMap * vWorldDirection.x, vWorldDirection.yz ) ).rgb, 1.0 );

		}
	`)}function eS(i){let t=new WeakMap,e=new WeakMap,n=null;function s(h,p=!1){return h==null?null:p?o(h):r(h)}function r(h){if(h&&h.isTexture){let p=h.mapping;if(p===Ul||p===Fl)if(t.has(h)){let x=t.get(h).texture;return a(x,h.mapping)}else{let x=h.image;if(x&&x.height>0){let w=new ha(x.height);return w.fromEquirectangularTexture(i,h),t.set(h,w),h.addEventListener("dispose",c),a(w.texture,h.mapping)}else return null}}return h}function o(h){if(h&&h.isTexture&&h.isPMREMTexture!==!0){let p=h.mapping,x=p===Ul||p===Fl,w=p===Qs||p===eo;if(x||w){let m=e.get(h),d=m!==void 0?m.texture.pmremVersion:0;if(h.isRenderTargetTexture&&h.pmremVersion!==d)return n===null&&(n=new wc(i)),m=x?n.fromEquirectangular(h,m):n.fromCubemap(h,m),m.texture.pmremVersion=h.pmremVersion,e.set(h,m),m.texture;if(m!==void 0)return m.texture;{let v=h.image;return x&&v&&v.height>0||w&&v&&l(v)?(n===null&&(n=new wc(i)),m=x?n.fromEquirectangular(h):n.fromCubemap(h),m.texture.pmremVersion=h.pmremVersion,e.set(h,m),h.addEventListener("dispose",f),m.texture):null}}}return h}function a(h,p){return p===Ul?h.mapping=Qs:p===Fl&&(h.mapping=eo),h}function l(h){let p=0,x=6;for(let w=0;w<x;w++)h[w]!==void 0&&p++;return p===x}function c(h){let p=h.target;p.removeEventListener("dispose",c);let x=t.get(p);x!==void 0&&(t.delete(p),x.dispose())}function f(h){let p=h.target;p.removeEventListener("dispose",f);let x=e.get(p);x!==void 0&&(e.delete(p),x.dispose())}function u(){t=new WeakMap,e=new WeakMap,n!==null&&(n.dispose(),n=null)}return{get:s,dispose:u}}function nS(i){let t={};function e(n){if(t[n]!==void 0)return t[n];let s=i.getExtension(n);return t[n]=s,s}return{has:function(n){return e(n)!==null},init:function(){e("EXT_color_buffer_float"),e("WEBGL_clip_cull_distance"),e("OES_texture_float_linear"),e("EXT_color_buffer_half_float"),e("WEBGL_multisampled_render_to_texture"),e("WEBGL_render_shared_exponent")},get:function(n){let s=e(n);return s===null&&Io("WebGLRenderer: "+n+" extension not supported."),s}}}function iS(i,t,e,n){let s={},r=new WeakMap,o=new FinalizationRegistry(x=>delete s[x]);function a(x){l(x.target)}function l(x){x.index!==null&&t.remove(x.index);for(let m in x.attributes)t.remove(x.attributes[m]);x.removeEventListener("dispose",a),delete s[x.id],o.unregister(x);let w=r.get(x);w&&(t.remove(w),r.delete(x)),n.releaseStatesOfGeometry(x),x.isInstancedBufferGeometry===!0&&delete x._maxInstanceCount,e.memory.geometries--}function c(x,w){return s[w.id]!==void 0||(w.addEventListener("dispose",a),s[w.id]=new WeakRef(w),o.register(w,w.id,w),e.memory.geometries++),w}function f(x){let w=x.attributes;for(let m in w)t.update(w[m],i.ARRAY_BUFFER)}function u(x){let w=x.index,m=x.attributes.position,d=0;if(m===void 0)return;let v=w!==null?w.array.length:m.array.length/3-1,C=m.count>=65535?Vo:zo,M=new C(Math.ceil(v/3)*6,1),P=M.array;if(w!==null){let _=w.array;d=w.version;for(let E=0,B=0;E<v;E+=3){let N=_[E+0],D=_[E+1],k=_[E+2];P[B++]=N,P[B++]=D,P[B++]=D,P[B++]=k,P[B++]=k,P[B++]=N}}else{d=m.version;for(let _=0,E=0;_<v;_+=3){let B=_+0,N=_+1,D=_+2;P[E++]=B,P[E++]=N,P[E++]=N,P[E++]=D,P[E++]=D,P[E++]=B}}M.version=d;let T=r.get(x);T&&t.remove(T),r.set(x,M)}function h(x){let w=r.get(x);if(w){let m=x.index;m!==null&&w.version<m.version&&u(x)}else u(x);return r.get(x)}function p(){for(let x in s){let w=s[x].deref();w!==void 0&&l(w)}}return{get:c,update:f,getWireframeAttribute:h,dispose:p}}function sS(i,t,e){let n;function s(u){n=u}let r,o;function a(u){r=u.type,o=u.bytesPerElement}function l(u,h){i.drawElements(n,h,r,u*o),e.update(h,n,1)}function c(u,h,p){p!==0&&(i.drawElementsInstanced(n,h,r,u*o,p),e.update(h,n,p))}function f(u,h,p){if(p===0)return;t.get("WEBGL_multi_draw").multiDrawElementsWEBGL(n,h,0,r,u,0,p);let w=0;for(let m=0;m<p;m++)w+=h[m];e.update(w,n,1)}this.setMode=s,this.setIndex=a,this.render=l,this.renderInstances=c,this.renderMultiDraw=f}function rS(i){let t={geometries:0,textures:0},e={frame:0,calls:0,triangles:0,points:0,lines:0};function n(r,o,a){switch(e.calls++,o){case i.TRIANGLES:e.triangles+=a*(r/3);break;case i.LINES:e.lines+=a*(r/2);break;case i.LINE_STRIP:e.lines+=a*(r-1);break;case i.LINE_LOOP:e.lines+=a*r;break;case i.POINTS:e.points+=a*r;break;default:jt("WebGLInfo: Unknown draw mode:",o);break}}function s(){e.calls=0,e.triangles=0,e.points=0,e.lines=0}return{memory:t,render:e,programs:null,autoReset:!0,reset:s,update:n}}function oS(i,t,e){let n=new WeakMap,s=new Xe;function r(o,a,l){let c=o.morphTargetInfluences,f=a.morphAttributes.position||a.morphAttributes.normal||a.morphAttributes.color,u=f!==void 0?f.length:0,h=n.get(a);if(h===void 0||h.count!==u){let B=function(){_.dispose(),n.delete(a),a.removeEventListener("dispose",B)};h!==void 0&&h.texture.dispose();let p=a.morphAttributes.position!==void 0,x=a.morphAttributes.normal!==void 0,w=a.morphAttributes.color!==void 0,m=a.morphAttributes.position||[],d=a.morphAttributes.normal||[],v=a.morphAttributes.color||[],C=0;p===!0&&(C=1),x===!0&&(C=2),w===!0&&(C=3);let M=a.attributes.position.count*C,P=1;M>t.maxTextureSize&&(P=Math.ceil(M/t.maxTextureSize),M=t.maxTextureSize);let T=new Float32Array(M*P*4*u),_=new Bo(T,M,P,u);_.type=gi,_.needsUpdate=!0;let E=C*4;for(let N=0;N<u;N++){let D=m[N],k=d[N],G=v[N],L=M*P*4*N;for(let H=0;H<D.count;H++){let Y=H*E;p===!0&&(s.fromBufferAttribute(D,H),T[L+Y+0]=s.x,T[L+Y+1]=s.y,T[L+Y+2]=s.z,T[L+Y+3]=0),x===!0&&(s.fromBufferAttribute(k,H),T[L+Y+4]=s.x,T[L+Y+5]=s.y,T[L+Y+6]=s.z,T[L+Y+7]=0),w===!0&&(s.fromBufferAttribute(G,H),T[L+Y+8]=s.x,T[L+Y+9]=s.y,T[L+Y+10]=s.z,T[L+Y+11]=G.itemSize===4?s.w:1)}}h={count:u,texture:_,size:new Jt(M,P)},n.set(a,h),a.addEventListener("dispose",B)}if(o.isInstancedMesh===!0&&o.morphTexture!==null)l.getUniforms().setValue(i,"morphTexture",o.morphTexture,e);else{let p=0;for(let w=0;w<c.length;w++)p+=c[w];let x=a.morphTargetsRelative?1:1-p;l.getUniforms().setValue(i,"morphTargetBaseInfluence",x),l.getUniforms().setValue(i,"morphTargetInfluences",c)}l.getUniforms().setValue(i,"morphTargetsTexture",h.texture,e),l.getUniforms().setValue(i,"morphTargetsTextureSize",h.size)}return{update:r}}function aS(i,t,e,n,s){let r=new WeakMap;function o(c){let f=s.render.frame,u=c.geometry,h=t.get(c,u);if(r.get(h)!==f&&(t.update(h),r.set(h,f)),c.isInstancedMesh&&(c.hasEventListener("dispose",l)===!1&&c.addEventListener("dispose",l),r.get(c)!==f&&(e.update(c.instanceMatrix,i.ARRAY_BUFFER),c.instanceColor!==null&&e.update(c.instanceColor,i.ARRAY_BUFFER),r.set(c,f))),c.isSkinnedMesh){let p=c.skeleton;r.get(p)!==f&&(p.update(),r.set(p,f))}return h}function a(){r=new WeakMap}function l(c){let f=c.target;f.removeEventListener("dispose",l),n.releaseStatesOfObject(f),e.remove(f.instanceMatrix),f.instanceColor!==null&&e.remove(f.instanceColor)}return{update:o,dispose:a}}var lS={[su]:"LINEAR_TONE_MAPPING",[ru]:"REINHARD_TONE_MAPPING",[ou]:"CINEON_TONE_MAPPING",[au]:"ACES_FILMIC_TONE_MAPPING",[cu]:"AGX_TONE_MAPPING",[hu]:"NEUTRAL_TONE_MAPPING",[lu]:"CUSTOM_TONE_MAPPING"};function cS(i,t,e,n,s,r){let o=new Vn(t,e,{type:i,depthBuffer:s,stencilBuffer:r,samples:n?4:0,storeMultisampledDepthBuffer:!1,storeMultisampledStencilBuffer:!1,resolveDepthBuffer:!1,resolveStencilBuffer:!1}),a=null,l=null,c=null,f=new di;f.setAttribute("position",new bn([-1,3,0,-1,-1,0,3,-1,0],3)),f.setAttribute("uv",new bn([0,2,0,0,2,0],2));let u=new yl({uniforms:{tDiffuse:{value:null}},vertexShader:`
			precision highp float;

			uniform mat4 modelViewMatrix;
			uniform mat4 projectionMatrix;

			attribute vec3 position;
			attribute vec2 uv;

			varying vec2 vUv;

			void main() {
				vUv = uv;
				gl_Position = projectionMatrix * modelViewMatrix * vec4( position, 1.0 );
			}`,fragmentShader:`
			precision highp float;

			uniform sampler2D tDiffuse;

			varying vec2 vUv;

			#include <tonemapping_pars_fragment>
			#include <colorspace_pars_fragment>

			void main() {
				gl_FragColor = texture2D( tDiffuse, vUv );

				#ifdef LINEAR_TONE_MAPPING
					gl_FragColor.rgb = LinearToneMapping( gl_FragColor.rgb );
				#elif defined( REINHARD_TONE_MAPPING )
					gl_FragColor.rgb = ReinhardToneMapping( gl_FragColor.rgb );
				#elif defined( CINEON_TONE_MAPPING )
					gl_FragColor.rgb = CineonToneMapping( gl_FragColor.rgb );
				#elif defined( ACES_FILMIC_TONE_MAPPING )
					gl_FragColor.rgb = ACESFilmicToneMapping( gl_FragColor.rgb );
				#elif defined( AGX_TONE_MAPPING )
					gl_FragColor.rgb = AgXToneMapping( gl_FragColor.rgb );
				#elif defined( NEUTRAL_TONE_MAPPING )
					gl_FragColor.rgb = NeutralToneMapping( gl_FragColor.rgb );
				#elif defined( CUSTOM_TONE_MAPPING )
					gl_FragColor.rgb = CustomToneMapping( gl_FragColor.rgb );
				#endif

				#ifdef SRGB_TRANSFER
					gl_FragColor = sRGBTransferOETF( gl_FragColor );
				#endif
			}`,depthTest:!1,depthWrite:!1}),h=new In(f,u),p=new Js(-1,1,1,-1,0,1),x=null,w=null,m=!1,d,v=null,C=[],M=!1;this.setSize=function(P,T){o.setSize(P,T),a!==null&&a.setSize(P,T),l!==null&&l.setSize(P,T);for(let _=0;_<C.length;_++){let E=C[_];E.setSize&&E.setSize(P,T)}},this.setEffects=function(P){C=P,M=C.length>0&&C[0].isRenderPass===!0;let T=o.width,_=o.height;C.length>0&&a===null&&(a=new Vn(T,_,{type:Ri,depthBuffer:!1,stencilBuffer:!1}),l=new Vn(T,_,{type:Ri,depthBuffer:!1,stencilBuffer:!1}));let E=s===!0&&C.some(B=>B.needsDepthTexture===!0);E!==(o.depthTexture!==null)&&(E===!0&&c===null&&(c=new ss(T,_),r===!0&&(c.format=os,c.type=tr)),o.dispose(),o.depthTexture=E?c:null,o.resolveDepthBuffer=E,o.storeMultisampledDepthBuffer=E);for(let B=0;B<C.length;B++){let N=C[B];N.setSize&&N.setSize(T,_),E&&N.needsDepthTexture===!0&&N.setDepthTexture&&N.setDepthTexture(c)}},this.begin=function(P,T){if(m||P.toneMapping===zi&&C.length===0)return!1;if(v=T,T!==null){let _=T.width,E=T.height;(o.width!==_||o.height!==E)&&this.setSize(_,E)}return M===!1&&P.setRenderTarget(o),d=P.toneMapping,P.toneMapping=zi,!0},this.hasRenderPass=function(){return M},this.end=function(P,T){P.toneMapping=d,m=!0;let _=o,E=a;for(let B=0;B<C.length;B++){let N=C[B];N.enabled!==!1&&(N.render(P,E,_,T),N.needsSwap!==!1&&(_=E,E=E===a?l:a))}if(x!==P.outputColorSpace||w!==P.toneMapping){x=P.outputColorSpace,w=P.toneMapping,u.defines={},ge.getTransfer(x)===Te&&(u.defines.SRGB_TRANSFER="");let B=lS[w];B&&(u.defines[B]=""),u.needsUpdate=!0}u.uniforms.tDiffuse.value=_.texture,P.setRenderTarget(v),P.render(h,p),v=null,m=!1},this.isCompositing=function(){return m},this.dispose=function(){o.dispose(),a!==null&&a.dispose(),l!==null&&l.dispose(),f.dispose(),u.dispose()}}var Am=new Wn,Rm=new ss(1,1),Cm=new Xo(1),Pm=new Bo,Im=new _l,Lm=new Wo,om=[],am=[],lm=new Float32Array(16),cm=new Float32Array(9),hm=new Float32Array(4);function ro(i,t,e){let n=i[0];if(n<=0||n>0)return i;let s=t*e,r=om[s];if(r===void 0&&(r=new Float32Array(s),om[s]=r),t!==0){n.toArray(r,0);for(let o=1,a=0;o!==t;++o)a+=e,i[o].toArray(r,a)}return r}function pn(i,t){if(i.length!==t.length)return!1;for(let e=0,n=i.length;e<n;e++)if(i[e]!==t[e])return!1;return!0}function mn(i,t){for(let e=0,n=t.length;e<n;e++)i[e]=t[e]}function Tc(i,t){let e=am[t];e===void 0&&(e=new Int32Array(t),am[t]=e);for(let n=0;n!==t;++n)e[n]=i.allocateTextureUnit();return e}function hS(i,t){let e=this.cache;e[0]!==t&&(i.uniform1f(this.addr,t),e[0]=t)}function uS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y)&&(i.uniform2f(this.addr,t.x,t.y),e[0]=t.x,e[1]=t.y);else{if(pn(e,t))return;i.uniform2fv(this.addr,t),mn(e,t)}}function fS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z)&&(i.uniform3f(this.addr,t.x,t.y,t.z),e[0]=t.x,e[1]=t.y,e[2]=t.z);else if(t.r!==void 0)(e[0]!==t.r||e[1]!==t.g||e[2]!==t.b)&&(i.uniform3f(this.addr,t.r,t.g,t.b),e[0]=t.r,e[1]=t.g,e[2]=t.b);else{if(pn(e,t))return;i.uniform3fv(this.addr,t),mn(e,t)}}function dS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z||e[3]!==t.w)&&(i.uniform4f(this.addr,t.x,t.y,t.z,t.w),e[0]=t.x,e[1]=t.y,e[2]=t.z,e[3]=t.w);else{if(pn(e,t))return;i.uniform4fv(this.addr,t),mn(e,t)}}function pS(i,t){let e=this.cache,n=t.elements;if(n===void 0){if(pn(e,t))return;i.uniformMatrix2fv(this.addr,!1,t),mn(e,t)}else{if(pn(e,n))return;hm.set(n),i.uniformMatrix2fv(this.addr,!1,hm),mn(e,n)}}function mS(i,t){let e=this.cache,n=t.elements;if(n===void 0){if(pn(e,t))return;i.uniformMatrix3fv(this.addr,!1,t),mn(e,t)}else{if(pn(e,n))return;cm.set(n),i.uniformMatrix3fv(this.addr,!1,cm),mn(e,n)}}function gS(i,t){let e=this.cache,n=t.elements;if(n===void 0){if(pn(e,t))return;i.uniformMatrix4fv(this.addr,!1,t),mn(e,t)}else{if(pn(e,n))return;lm.set(n),i.uniformMatrix4fv(this.addr,!1,lm),mn(e,n)}}function _S(i,t){let e=this.cache;e[0]!==t&&(i.uniform1i(this.addr,t),e[0]=t)}function xS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y)&&(i.uniform2i(this.addr,t.x,t.y),e[0]=t.x,e[1]=t.y);else{if(pn(e,t))return;i.uniform2iv(this.addr,t),mn(e,t)}}function yS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z)&&(i.uniform3i(this.addr,t.x,t.y,t.z),e[0]=t.x,e[1]=t.y,e[2]=t.z);else{if(pn(e,t))return;i.uniform3iv(this.addr,t),mn(e,t)}}function vS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z||e[3]!==t.w)&&(i.uniform4i(this.addr,t.x,t.y,t.z,t.w),e[0]=t.x,e[1]=t.y,e[2]=t.z,e[3]=t.w);else{if(pn(e,t))return;i.uniform4iv(this.addr,t),mn(e,t)}}function SS(i,t){let e=this.cache;e[0]!==t&&(i.uniform1ui(this.addr,t),e[0]=t)}function MS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y)&&(i.uniform2ui(this.addr,t.x,t.y),e[0]=t.x,e[1]=t.y);else{if(pn(e,t))return;i.uniform2uiv(this.addr,t),mn(e,t)}}function bS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z)&&(i.uniform3ui(this.addr,t.x,t.y,t.z),e[0]=t.x,e[1]=t.y,e[2]=t.z);else{if(pn(e,t))return;i.uniform3uiv(this.addr,t),mn(e,t)}}function wS(i,t){let e=this.cache;if(t.x!==void 0)(e[0]!==t.x||e[1]!==t.y||e[2]!==t.z||e[3]!==t.w)&&(i.uniform4ui(this.addr,t.x,t.y,t.z,t.w),e[0]=t.x,e[1]=t.y,e[2]=t.z,e[3]=t.w);else{if(pn(e,t))return;i.uniform4uiv(this.addr,t),mn(e,t)}}function Ac(i){return i.version===0&&(i.compareFunction=vu,i.needsUpdate=!0),i}function ES(i,t,e){let n=this.cache,s=e.allocateTextureUnit();n[0]!==s&&(i.uniform1i(this.addr,s),n[0]=s);let r;this.type===i.SAMPLER_2D_SHADOW?r=Ac(Rm):r=Am,e.setTexture2D(t||r,s)}function TS(i,t,e){let n=this.cache,s=e.allocateTextureUnit();n[0]!==s&&(i.uniform1i(this.addr,s),n[0]=s),e.setTexture3D(t||Im,s)}function AS(i,t,e){let n=this.cache,s=e.allocateTextureUnit();n[0]!==s&&(i.uniform1i(this.addr,s),n[0]=s);let r;this.type===i.SAMPLER_CUBE_SHADOW?r=Ac(Cm):r=Lm,e.setTextureCube(t||r,s)}function RS(i,t,e){let n=this.cache,s=e.allocateTextureUnit();n[0]!==s&&(i.uniform1i(this.addr,s),n[0]=s),e.setTexture2DArray(t||Pm,s)}function CS(i){switch(i){case 5126:return hS;case 35664:return uS;case 35665:return fS;case 35666:return dS;case 35674:return pS;case 35675:return mS;case 35676:return gS;case 5124:case 35670:return _S;case 35667:case 35671:return xS;case 35668:case 35672:return yS;case 35669:case 35673:return vS;case 5125:return SS;case 36294:return MS;case 36295:return bS;case 36296:return wS;case 35678:case 36198:case 36298:case 36306:case 35682:return ES;case 35679:case 36299:case 36307:return TS;case 35680:case 36300:case 36308:case 36293:return AS;case 36289:case 36303:case 36311:case 36292:return RS}}function PS(i,t){i.uniform1fv(this.addr,t)}function IS(i,t){let e=ro(t,this.size,2);i.uniform2fv(this.addr,e)}function LS(i,t){let e=ro(t,this.size,3);i.uniform3fv(this.addr,e)}function DS(i,t){let e=ro(t,this.size,4);i.uniform4fv(this.addr,e)}function NS(i,t){let e=ro(t,this.size,4);i.uniformMatrix2fv(this.addr,!1,e)}function US(i,t){let e=ro(t,this.size,9);i.uniformMatrix3fv(this.addr,!1,e)}function FS(i,t){let e=ro(t,this.size,16);i.uniformMatrix4fv(this.addr,!1,e)}function OS(i,t){i.uniform1iv(this.addr,t)}function BS(i,t){i.uniform2iv(this.addr,t)}function kS(i,t){i.uniform3iv(this.addr,t)}function zS(i,t){i.uniform4iv(this.addr,t)}function VS(i,t){i.uniform1uiv(this.addr,t)}function GS(i,t){i.uniform2uiv(this.addr,t)}function HS(i,t){i.uniform3uiv(this.addr,t)}function WS(i,t){i.uniform4uiv(this.addr,t)}function XS(i,t,e){let n=this.cache,s=t.length,r=Tc(e,s);pn(n,r)||(i.uniform1iv(this.addr,r),mn(n,r));let o;this.type===i.SAMPLER_2D_SHADOW?o=Ac(Rm):o=Am;for(let a=0;a!==s;++a)e.setTexture2D(t[a]||o,r[a])}function qS(i,t,e){let n=this.cache,s=t.length,r=Tc(e,s);pn(n,r)||(i.uniform1iv(this.addr,r),mn(n,r));for(let o=0;o!==s;++o)e.setTexture3D(t[o]||Im,r[o])}function YS(i,t,e){let n=this.cache,s=t.length,r=Tc(e,s);pn(n,r)||(i.uniform1iv(this.addr,r),mn(n,r));let o;this.type===i.SAMPLER_CUBE_SHADOW?o=Ac(Cm):o=Lm;for(let a=0;a!==s;++a)e.setTextureCube(t[a]||o,r[a])}function ZS(i,t,e){let n=this.cache,s=t.length,r=Tc(e,s);pn(n,r)||(i.uniform1iv(this.addr,r),mn(n,r));for(let o=0;o!==s;++o)e.setTexture2DArray(t[o]||Pm,r[o])}function $S(i){switch(i){case 5126:return PS;case 35664:return IS;case 35665:return LS;case 35666:return DS;case 35674:return NS;case 35675:return US;case 35676:return FS;case 5124:case 35670:return OS;case 35667:case 35671:return BS;case 35668:case 35672:return kS;case 35669:case 35673:return zS;case 5125:return VS;case 36294:return GS;case 36295:return HS;case 36296:return WS;case 35678:case 36198:case 36298:case 36306:case 35682:return XS;case 35679:case 36299:case 36307:return qS;case 35680:case 36300:case 36308:case 36293:return YS;case 36289:case 36303:case 36311:case 36292:return ZS}}var Du=class{constructor(t,e,n){this.id=t,this.addr=n,this.cache=[],this.type=e.type,this.setValue=CS(e.type)}},Nu=class{constructor(t,e,n){this.id=t,this.addr=n,this.cache=[],this.type=e.type,this.size=e.size,this.setValue=$S(e.type)}},Uu=class{constructor(t){this.id=t,this.seq=[],this.map={}}setValue(t,e,n){let s=this.seq;for(let r=0,o=s.length;r!==o;++r){let a=s[r];a.setValue(t,e[a.id],n)}}},Iu=/(\w+)(\])?(\[|\.)?/g;function um(i,t){i.seq.push(t),i.map[t.id]=t}function JS(i,t,e){let n=i.name,s=n.length;for(Iu.lastIndex=0;;){let r=Iu.exec(n),o=Iu.lastIndex,a=r[1],l=r[2]==="]",c=r[3];if(l&&(a=a|0),c===void 0||c==="["&&o+2===s){um(e,c===void 0?new Du(a,i,t):new Nu(a,i,t));break}else{let u=e.map[a];u===void 0&&(u=new Uu(a),um(e,u)),e=u}}}var so=class{constructor(t,e){this.seq=[],this.map={};let n=t.getProgramParameter(e,t.ACTIVE_UNIFORMS);for(let o=0;o<n;++o){let a=t.getActiveUniform(e,o),l=t.getUniformLocation(e,a.name);JS(a,l,this)}let s=[],r=[];for(let o of this.seq)o.type===t.SAMPLER_2D_SHADOW||o.type===t.SAMPLER_CUBE_SHADOW||o.type===t.SAMPLER_2D_ARRAY_SHADOW?s.push(o):r.push(o);s.length>0&&(this.seq=s.concat(r))}setValue(t,e,n,s){let r=this.map[e];r!==void 0&&r.setValue(t,n,s)}setOptional(t,e,n){let s=e[n];s!==void 0&&this.setValue(t,n,s)}static upload(t,e,n,s){for(let r=0,o=e.length;r!==o;++r){let a=e[r],l=n[a.id];l.needsUpdate!==!1&&a.setValue(t,l.value,s)}}static seqWithValue(t,e){let n=[];for(let s=0,r=t.length;s!==r;++s){let o=t[s];o.id in e&&n.push(o)}return n}};function fm(i,t,e){let n=i.createShader(t);return i.shaderSource(n,e),i.compileShader(n),n}var KS=37297,jS=0;function QS(i,t){let e=i.split(`
`),n=[],s=Math.max(t-6,0),r=Math.min(t+6,e.length);for(let o=s;o<r;o++){let a=o+1;n.push(`${a===t?">":" "} ${a}: ${e[o]}`)}return n.join(`
`)}var dm=new Qt;function tM(i){ge._getMatrix(dm,ge.workingColorSpace,i);let t=`mat3( ${dm.elements.map(e=>e.toFixed(4))} )`;switch(ge.getTransfer(i)){case Fo:return[t,"LinearTransferOETF"];case Te:return[t,"sRGBTransferOETF"];default:return qt("WebGLProgram: Unsupported color space: ",i),[t,"LinearTransferOETF"]}}function pm(i,t,e){let n=i.getShaderParameter(t,i.COMPILE_STATUS),r=(i.getShaderInfoLog(t)||"").trim();if(n&&r==="")return"";let o=/ERROR: 0:(\d+)/.exec(r);if(o){let a=parseInt(o[1]);return e.toUpperCase()+`

`+r+`

`+QS(i.getShaderSource(t),a)}else return r}function eM(i,t){let e=tM(t);return[`vec4 ${i}( vec4 value ) {`,`	return ${e[1]}( vec4( ${e[0]} * value.rgb, value.a ) );`,"}"].join(`
`)}var nM={[su]:"Linear",[ru]:"Reinhard",[ou]:"Cineon",[au]:"ACESFilmic",[cu]:"AgX",[hu]:"Neutral",[lu]:"Custom"};function iM(i,t){let e=nM[t];return e===void 0?(qt("WebGLProgram: Unsupported toneMapping:",t),"vec3 "+i+"( vec3 color ) { return LinearToneMapping( color ); }"):"vec3 "+i+"( vec3 color ) { return "+e+"ToneMapping( color ); }"}var bc=new W;function sM(){ge.getLuminanceCoefficients(bc);let i=bc.x.toFixed(4),t=bc.y.toFixed(4),e=bc.z.toFixed(4);return["float luminance( const in vec3 rgb ) {",`	const vec3 weights = vec3( ${i}, ${t}, ${e} );`,"	return dot( weights, rgb );","}"].join(`
`)}function rM(i){return[i.extensionClipCullDistance?"#extension GL_ANGLE_clip_cull_distance : require":"",i.extensionMultiDraw?"#extension GL_ANGLE_multi_draw : require":""].filter(ca).join(`
`)}function oM(i){let t=[];for(let e in i){let n=i[e];n!==!1&&t.push("#define "+e+" "+n)}return t.join(`
`)}function aM(i,t){let e={},n=i.getProgramParameter(t,i.ACTIVE_ATTRIBUTES);for(let s=0;s<n;s++){let r=i.getActiveAttrib(t,s),o=r.name,a=1;r.type===i.FLOAT_MAT2&&(a=2),r.type===i.FLOAT_MAT3&&(a=3),r.type===i.FLOAT_MAT4&&(a=4),e[o]={type:r.type,location:i.getAttribLocation(t,o),locationSize:a}}return e}function ca(i){return i!==""}function mm(i,t){let e=t.numSpotLightShadows+t.numSpotLightMaps-t.numSpotLightShadowsWithMaps;return i.replace(/NUM_SUN_LIGHTS/g,t.numSunLights).replace(/NUM_DIR_LIGHTS/g,t.numDirLights).replace(/NUM_SPOT_LIGHTS/g,t.numSpotLights).replace(/NUM_SPOT_LIGHT_MAPS/g,t.numSpotLightMaps).replace(/NUM_SPOT_LIGHT_COORDS/g,e).replace(/NUM_RECT_AREA_LIGHTS/g,t.numRectAreaLights).replace(/NUM_POINT_LIGHTS/g,t.numPointLights).replace(/NUM_HEMI_LIGHTS/g,t.numHemiLights).replace(/NUM_SUN_LIGHT_SHADOWS/g,t.numSunLightShadows).replace(/NUM_DIR_LIGHT_SHADOWS/g,t.numDirLightShadows).replace(/NUM_SPOT_LIGHT_SHADOWS_WITH_MAPS/g,t.numSpotLightShadowsWithMaps).replace(/NUM_SPOT_LIGHT_SHADOWS/g,t.numSpotLightShadows).replace(/NUM_POINT_LIGHT_SHADOWS/g,t.numPointLightShadows).replace(/NUM_LIGHT_PROBE_GRIDS/g,t.numLightProbeGrids)}function gm(i,t){return i.replace(/NUM_CLIPPING_PLANES/g,t.numClippingPlanes).replace(/UNION_CLIPPING_PLANES/g,t.numClippingPlanes-t.numClipIntersection)}var lM=/^[ \t]*#include +<([\w\d./]+)>/gm;function Fu(i){return i.replace(lM,cM)}function cM(i,t){let e=le[t];if(e===void 0)throw new Error("THREE.WebGLProgram: Can not resolve #include <"+t+">");return Fu(e)}var hM=/#pragma unroll_loop_start\s+for\s*\(\s*int\s+i\s*=\s*(\d+)\s*;\s*i\s*<\s*(\d+)\s*;\s*i\s*\+\+\s*\)\s*{([\s\S]+?)}\s+#pragma unroll_loop_end/g;function _m(i){return i.replace(hM,uM)}function uM(i,t,e,n){let s="";for(let r=parseInt(t);r<parseInt(e);r++)s+=n.replace(/\[\s*i\s*\]/g,"[ "+r+" ]").replace(/UNROLLED_LOOP_INDEX/g,r);return s}function xm(i){let t=`precision ${i.precision} float;
	precision ${i.precision} int;
	precision ${i.precision} sampler2D;
	precision ${i.precision} samplerCube;
	precision ${i.precision} sampler3D;
	precision ${i.precision} sampler2DArray;
	precision ${i.precision} sampler2DShadow;
	precision ${i.precision} samplerCubeShadow;
	precision ${i.precision} sampler2DArrayShadow;
	precision ${i.precision} isampler2D;
	precision ${i.precision} isampler3D;
	precision ${i.precision} isamplerCube;
	precision ${i.precision} isampler2DArray;
	precision ${i.precision} usampler2D;
	precision ${i.precision} usampler3D;
	precision ${i.precision} usamplerCube;
	precision ${i.precision} usampler2DArray;
	`;return i.precision==="highp"?t+=`
#define HIGH_PRECISION`:i.precision==="mediump"?t+=`
#define MEDIUM_PRECISION`:i.precision==="lowp"&&(t+=`
#define LOW_PRECISION`),t}var fM={[ta]:"SHADOWMAP_TYPE_PCF",[Qr]:"SHADOWMAP_TYPE_VSM"};function dM(i){return fM[i.shadowMapType]||"SHADOWMAP_TYPE_BASIC"}var pM={[eo]:"ENVMAP_MODE_REFRACTION"};function mM(i){return i.envMap===!1?"ENVMAP_MODE_REFLECTION":pM[i.envMapMode]||"ENVMAP_MODE_REFLECTION"}var gM={[Nl]:"ENVMAP_BLENDING_MULTIPLY",[Np]:"ENVMAP_BLENDING_MIX",[Up]:"ENVMAP_BLENDING_ADD"};function _M(i){return i.envMap===!1?"ENVMAP_BLENDING_NONE":gM[i.combine]||"ENVMAP_BLENDING_NONE"}function xM(i,t,e,n){let s=i.getContext(),r=e.defines,o=e.vertexShader,a=e.fragmentShader,l=dM(e),c=e.envMapPMREM===!0?"ENVMAP_TYPE_PMREM":"ENVMAP_TYPE_CUBE",f=mM(e),u=_M(e),h=rM(e),p=oM(r),x=s.createProgram(),w,m,d=e.glslVersion?"#version "+e.glslVersion+`
`:"";e.isRawShaderMaterial?(w=["#define SHADER_TYPE "+e.shaderType,"#define SHADER_NAME "+e.shaderName,p].filter(ca).join(`
`),w.length>0&&(w+=`
`),m=["#define SHADER_TYPE "+e.shaderType,"#define SHADER_NAME "+e.shaderName,p].filter(ca).join(`
`),m.length>0&&(m+=`
`)):(w=[xm(e),"#define SHADER_TYPE "+e.shaderType,"#define SHADER_NAME "+e.shaderName,p,e.extensionClipCullDistance?"#define USE_CLIP_DISTANCE":"",e.batching?"#define USE_BATCHING":"",e.batchingColor?"#define USE_BATCHING_COLOR":"",e.instancing?"#define USE_INSTANCING":"",e.instancingColor?"#define USE_INSTANCING_COLOR":"",e.instancingMorph?"#define USE_INSTANCING_MORPH":"",e.useFog&&e.fog?"#define USE_FOG":"",e.useFog&&e.fogExp2?"#define FOG_EXP2":"",e.map?"#define USE_MAP":"",e.envMap?"#define USE_ENVMAP":"",e.envMap?"#define "+f:"",e.lightMap?"#define USE_LIGHTMAP":"",e.aoMap?"#define USE_AOMAP":"",e.bumpMap?"#define USE_BUMPMAP":"",e.normalMap?"#define USE_NORMALMAP":"",e.normalMapObjectSpace?"#define USE_NORMALMAP_OBJECTSPACE":"",e.normalMapTangentSpace?"#define USE_NORMALMAP_TANGENTSPACE":"",e.displacementMap?"#define USE_DISPLACEMENTMAP":"",e.emissiveMap?"#define USE_EMISSIVEMAP":"",e.anisotropy?"#define USE_ANISOTROPY":"",e.anisotropyMap?"#define USE_ANISOTROPYMAP":"",e.clearcoatMap?"#define USE_CLEARCOATMAP":"",e.clearcoatRoughnessMap?"#define USE_CLEARCOAT_ROUGHNESSMAP":"",e.clearcoatNormalMap?"#define USE_CLEARCOAT_NORMALMAP":"",e.diffuseRoughnessMap?"#define USE_DIFFUSE_ROUGHNESSMAP":"",e.iridescenceMap?"#define USE_IRIDESCENCEMAP":"",e.iridescenceThicknessMap?"#define USE_IRIDESCENCE_THICKNESSMAP":"",e.specularMap?"#define USE_SPECULARMAP":"",e.specularColorMap?"#define USE_SPECULAR_COLORMAP":"",e.specularIntensityMap?"#define USE_SPECULAR_INTENSITYMAP":"",e.roughnessMap?"#define USE_ROUGHNESSMAP":"",e.metalnessMap?"#define USE_METALNESSMAP":"",e.alphaMap?"#define USE_ALPHAMAP":"",e.alphaHash?"#define USE_ALPHAHASH":"",e.transmission?"#define USE_TRANSMISSION":"",e.transmissionMap?"#define USE_TRANSMISSIONMAP":"",e.thicknessMap?"#define USE_THICKNESSMAP":"",e.sheenColorMap?"#define USE_SHEEN_COLORMAP":"",e.sheenRoughnessMap?"#define USE_SHEEN_ROUGHNESSMAP":"",e.mapUv?"#define MAP_UV "+e.mapUv:"",e.alphaMapUv?"#define ALPHAMAP_UV "+e.alphaMapUv:"",e.lightMapUv?"#define LIGHTMAP_UV "+e.lightMapUv:"",e.aoMapUv?"#define AOMAP_UV "+e.aoMapUv:"",e.emissiveMapUv?"#define EMISSIVEMAP_UV "+e.emissiveMapUv:"",e.bumpMapUv?"#define BUMPMAP_UV "+e.bumpMapUv:"",e.normalMapUv?"#define NORMALMAP_UV "+e.normalMapUv:"",e.displacementMapUv?"#define DISPLACEMENTMAP_UV "+e.displacementMapUv:"",e.metalnessMapUv?"#define METALNESSMAP_UV "+e.metalnessMapUv:"",e.roughnessMapUv?"#define ROUGHNESSMAP_UV "+e.roughnessMapUv:"",e.anisotropyMapUv?"#define ANISOTROPYMAP_UV "+e.anisotropyMapUv:"",e.clearcoatMapUv?"#define CLEARCOATMAP_UV "+e.clearcoatMapUv:"",e.clearcoatNormalMapUv?"#define CLEARCOAT_NORMALMAP_UV "+e.clearcoatNormalMapUv:"",e.clearcoatRoughnessMapUv?"#define CLEARCOAT_ROUGHNESSMAP_UV "+e.clearcoatRoughnessMapUv:"",e.diffuseRoughnessMapUv?"#define DIFFUSE_ROUGHNESSMAP_UV "+e.diffuseRoughnessMapUv:"",e.iridescenceMapUv?"#define IRIDESCENCEMAP_UV "+e.iridescenceMapUv:"",e.iridescenceThicknessMapUv?"#define IRIDESCENCE_THICKNESSMAP_UV "+e.iridescenceThicknessMapUv:"",e.sheenColorMapUv?"#define SHEEN_COLORMAP_UV "+e.sheenColorMapUv:"",e.sheenRoughnessMapUv?"#define SHEEN_ROUGHNESSMAP_UV "+e.sheenRoughnessMapUv:"",e.specularMapUv?"#define SPECULARMAP_UV "+e.specularMapUv:"",e.specularColorMapUv?"#define SPECULAR_COLORMAP_UV "+e.specularColorMapUv:"",e.specularIntensityMapUv?"#define SPECULAR_INTENSITYMAP_UV "+e.specularIntensityMapUv:"",e.transmissionMapUv?"#define TRANSMISSIONMAP_UV "+e.transmissionMapUv:"",e.thicknessMapUv?"#define THICKNESSMAP_UV "+e.thicknessMapUv:"",e.vertexTangents&&e.flatShading===!1?"#define USE_TANGENT":"",e.vertexNormals?"#define HAS_NORMAL":"",e.vertexColors?"#define USE_COLOR":"",e.vertexAlphas?"#define USE_COLOR_ALPHA":"",e.vertexUv1s?"#define USE_UV1":"",e.vertexUv2s?"#define USE_UV2":"",e.vertexUv3s?"#define USE_UV3":"",e.pointsUvs?"#define USE_POINTS_UV":"",e.flatShading?"#define FLAT_SHADED":"",e.skinning?"#define USE_SKINNING":"",e.morphTargets?"#define USE_MORPHTARGETS":"",e.morphNormals&&e.flatShading===!1?"#define USE_MORPHNORMALS":"",e.morphColors?"#define USE_MORPHCOLORS":"",e.morphTargetsCount>0?"#define MORPHTARGETS_TEXTURE_STRIDE "+e.morphTextureStride:"",e.morphTargetsCount>0?"#define MORPHTARGETS_COUNT "+e.morphTargetsCount:"",e.doubleSided?"#define DOUBLE_SIDED":"",e.flipSided?"#define FLIP_SIDED":"",e.shadowMapEnabled?"#define USE_SHADOWMAP":"",e.shadowMapEnabled?"#define "+l:"",e.sizeAttenuation?"#define USE_SIZEATTENUATION":"",e.numLightProbes>0?"#define USE_LIGHT_PROBES":"",e.logarithmicDepthBuffer?"#define USE_LOGARITHMIC_DEPTH_BUFFER":"",e.reversedDepthBuffer?"#define USE_REVERSED_DEPTH_BUFFER":"","uniform mat4 modelMatrix;","uniform mat4 modelViewMatrix;","uniform mat4 projectionMatrix;","uniform mat4 viewMatrix;","uniform mat3 normalMatrix;","uniform vec3 cameraPosition;","uniform bool isOrthographic;","#ifdef USE_INSTANCING","	attribute mat4 instanceMatrix;","#endif","#ifdef USE_INSTANCING_COLOR","	attribute vec3 instanceColor;","#endif","#ifdef USE_INSTANCING_MORPH","	uniform sampler2D morphTexture;","#endif","attribute vec3 position;","attribute vec3 normal;","attribute vec2 uv;","#ifdef USE_UV1","	attribute vec2 uv1;","#endif","#ifdef USE_UV2","	attribute vec2 uv2;","#endif","#ifdef USE_UV3","	attribute vec2 uv3;","#endif","#ifdef USE_TANGENT","	attribute vec4 tangent;","#endif","#if defined( USE_COLOR_ALPHA )","	attribute vec4 color;","#elif defined( USE_COLOR )","	attribute vec3 color;","#endif","#ifdef USE_SKINNING","	attribute vec4 skinIndex;","	attribute vec4 skinWeight;","#endif",`
`].filter(ca).join(`
`),m=[xm(e),"#define SHADER_TYPE "+e.shaderType,"#define SHADER_NAME "+e.shaderName,p,e.useFog&&e.fog?"#define USE_FOG":"",e.useFog&&e.fogExp2?"#define FOG_EXP2":"",e.alphaToCoverage?"#define ALPHA_TO_COVERAGE":"",e.map?"#define USE_MAP":"",e.matcap?"#define USE_MATCAP":"",e.envMap?"#define USE_ENVMAP":"",e.envMap?"#define "+c:"",e.envMap?"#define "+f:"",e.envMap?"#define "+u:"",e.envMapPMREM?"#define ENVMAP_MAX_LOD "+e.envMapMaxLod+".0":"",e.envMapPMREM?"#define ENVMAP_SIZE "+e.envMapSize+".0":"",e.lightMap?"#define USE_LIGHTMAP":"",e.aoMap?"#define USE_AOMAP":"",e.bumpMap?"#define USE_BUMPMAP":"",e.normalMap?"#define USE_NORMALMAP":"",e.normalMapObjectSpace?"#define USE_NORMALMAP_OBJECTSPACE":"",e.normalMapTangentSpace?"#define USE_NORMALMAP_TANGENTSPACE":"",e.packedNormalMap?"#define USE_PACKED_NORMALMAP":"",e.emissiveMap?"#define USE_EMISSIVEMAP":"",e.anisotropy?"#define USE_ANISOTROPY":"",e.anisotropyMap?"#define USE_ANISOTROPYMAP":"",e.clearcoat?"#define USE_CLEARCOAT":"",e.clearcoatMap?"#define USE_CLEARCOATMAP":"",e.clearcoatRoughnessMap?"#define USE_CLEARCOAT_ROUGHNESSMAP":"",e.clearcoatNormalMap?"#define USE_CLEARCOAT_NORMALMAP":"",e.diffuseRoughness?"#define USE_DIFFUSE_ROUGHNESS":"",e.diffuseRoughnessMap?"#define USE_DIFFUSE_ROUGHNESSMAP":"",e.dispersion?"#define USE_DISPERSION":"",e.retroreflection?"#define USE_RETROREFLECTION":"",e.iridescence?"#define USE_IRIDESCENCE":"",e.iridescenceMap?"#define USE_IRIDESCENCEMAP":"",e.iridescenceThicknessMap?"#define USE_IRIDESCENCE_THICKNESSMAP":"",e.specularMap?"#define USE_SPECULARMAP":"",e.specularColorMap?"#define USE_SPECULAR_COLORMAP":"",e.specularIntensityMap?"#define USE_SPECULAR_INTENSITYMAP":"",e.roughnessMap?"#define USE_ROUGHNESSMAP":"",e.metalnessMap?"#define USE_METALNESSMAP":"",e.alphaMap?"#define USE_ALPHAMAP":"",e.alphaTest?"#define USE_ALPHATEST":"",e.alphaHash?"#define USE_ALPHAHASH":"",e.sheen?"#define USE_SHEEN":"",e.sheenColorMap?"#define USE_SHEEN_COLORMAP":"",e.sheenRoughnessMap?"#define USE_SHEEN_ROUGHNESSMAP":"",e.transmission?"#define USE_TRANSMISSION":"",e.transmissionMap?"#define USE_TRANSMISSIONMAP":"",e.thicknessMap?"#define USE_THICKNESSMAP":"",e.vertexTangents&&e.flatShading===!1?"#define USE_TANGENT":"",e.vertexColors||e.instancingColor?"#define USE_COLOR":"",e.vertexAlphas||e.batchingColor?"#define USE_COLOR_ALPHA":"",e.vertexUv1s?"#define USE_UV1":"",e.vertexUv2s?"#define USE_UV2":"",e.vertexUv3s?"#define USE_UV3":"",e.pointsUvs?"#define USE_POINTS_UV":"",e.gradientMap?"#define USE_GRADIENTMAP":"",e.flatShading?"#define FLAT_SHADED":"",e.doubleSided?"#define DOUBLE_SIDED":"",e.flipSided?"#define FLIP_SIDED":"",e.shadowMapEnabled?"#define USE_SHADOWMAP":"",e.shadowMapEnabled?"#define "+l:"",e.premultipliedAlpha?"#define PREMULTIPLIED_ALPHA":"",e.numLightProbes>0?"#define USE_LIGHT_PROBES":"",e.decodeVideoTexture?"#define DECODE_VIDEO_TEXTURE":"",e.decodeVideoTextureEmissive?"#define DECODE_VIDEO_TEXTURE_EMISSIVE":"",e.logarithmicDepthBuffer?"#define USE_LOGARITHMIC_DEPTH_BUFFER":"",e.reversedDepthBuffer?"#define USE_REVERSED_DEPTH_BUFFER":"","uniform mat4 viewMatrix;","uniform vec3 cameraPosition;","uniform bool isOrthographic;",e.toneMapping!==zi?"#define TONE_MAPPING":"",e.toneMapping!==zi?le.tonemapping_pars_fragment:"",e.toneMapping!==zi?iM("toneMapping",e.toneMapping):"",e.dithering?"#define DITHERING":"",e.opaque?"#define OPAQUE":"",le.colorspace_pars_fragment,eM("linearToOutputTexel",e.outputColorSpace),sM(),e.useDepthPacking?"#define DEPTH_PACKING "+e.depthPacking:"",`
`].filter(ca).join(`
`)),o=Fu(o),o=mm(o,e),o=gm(o,e),a=Fu(a),a=mm(a,e),a=gm(a,e),o=_m(o),a=_m(a),e.isRawShaderMaterial!==!0&&(d=`#version 300 es
`,w=[h,"#define attribute in","#define varying out","#define texture2D texture"].join(`
`)+`
`+w,m=["#define varying in",e.glslVersion===Su?"":"layout(location = 0) out highp vec4 pc_fragColor;",e.glslVersion===Su?"":"#define gl_FragColor pc_fragColor","#define gl_FragDepthEXT gl_FragDepth","#define texture2D texture","#define textureCube texture","#define texture2DProj textureProj","#define texture2DLodEXT textureLod","#define texture2DProjLodEXT textureProjLod","#define textureCubeLodEXT textureLod","#define texture2DGradEXT textureGrad","#define texture2DProjGradEXT textureProjGrad","#define textureCubeGradEXT textureGrad"].join(`
`)+`
`+m);let v=d+w+o,C=d+m+a,M=fm(s,s.VERTEX_SHADER,v),P=fm(s,s.FRAGMENT_SHADER,C);s.attachShader(x,M),s.attachShader(x,P),e.index0AttributeName!==void 0?s.bindAttribLocation(x,0,e.index0AttributeName):e.hasPositionAttribute===!0&&s.bindAttribLocation(x,0,"position"),s.linkProgram(x);function T(N){if(i.debug.checkShaderErrors){let D=s.getProgramInfoLog(x)||"",k=s.getShaderInfoLog(M)||"",G=s.getShaderInfoLog(P)||"",L=D.trim(),H=k.trim(),Y=G.trim(),V=!0,lt=!0;if(s.getProgramParameter(x,s.LINK_STATUS)===!1)if(V=!1,typeof i.debug.onShaderError=="function")i.debug.onShaderError(s,x,M,P);else{let J=pm(s,M,"vertex"),j=pm(s,P,"fragment");jt("WebGLProgram: Shader Error "+s.getError()+" - VALIDATE_STATUS "+s.getProgramParameter(x,s.VALIDATE_STATUS)+`

Material Name: `+N.name+`
Material Type: `+N.type+`

Program Info Log: `+L+`
`+J+`
`+j)}else L!==""?qt("WebGLProgram: Program Info Log:",L):(H===""||Y==="")&&(lt=!1);lt&&(N.diagnostics={runnable:V,programLog:L,vertexShader:{log:H,prefix:w},fragmentShader:{log:Y,prefix:m}})}s.deleteShader(M),s.deleteShader(P),_=new so(s,x),E=aM(s,x)}let _;this.getUniforms=function(){return _===void 0&&T(this),_};let E;this.getAttributes=function(){return E===void 0&&T(this),E};let B=e.rendererExtensionParallelShaderCompile===!1;return this.isReady=function(){return B===!1&&(B=s.getProgramParameter(x,KS)),B},this.destroy=function(){n.releaseStatesOfProgram(this),s.deleteProgram(x),this.program=void 0},this.type=e.shaderType,this.name=e.shaderName,this.id=jS++,this.cacheKey=t,this.usedTimes=1,this.program=x,this.vertexShader=M,this.fragmentShader=P,this}var yM=0,Ou=class{constructor(){this.shaderCache=new Map,this.materialCache=new Map}update(t,e,n){let s=this._getShaderCacheForMaterial(t);return s.has(e)===!1&&(s.add(e),e.usedTimes++),s.has(n)===!1&&(s.add(n),n.usedTimes++),this}remove(t){let e=this.materialCache.get(t);for(let n of e)n.usedTimes--,n.usedTimes===0&&this.shaderCache.delete(n.code);return this.materialCache.delete(t),this}getVertexShaderStage(t){return this._getShaderStage(t.vertexShader)}getFragmentShaderStage(t){return this._getShaderStage(t.fragmentShader)}dispose(){this.shaderCache.clear(),this.materialCache.clear()}_getShaderCacheForMaterial(t){let e=this.materialCache,n=e.get(t);return n===void 0&&(n=new Set,e.set(t,n)),n}_getShaderStage(t){let e=this.shaderCache,n=e.get(t);return n===void 0&&(n=new Bu(t),e.set(t,n)),n}},Bu=class{constructor(t){this.id=yM++,this.code=t,this.usedTimes=0}};function vM(i){return i===Ls||i===oa||i===aa}function SM(i,t,e,n,s,r){let o=new ko,a=new Ou,l=new Set,c=[],f=new Map,u=n.logarithmicDepthBuffer,h={MeshDepthMaterial:"depth",MeshDistanceMaterial:"distance",MeshNormalMaterial:"normal",MeshBasicMaterial:"basic",MeshLambertMaterial:"lambert",MeshPhongMaterial:"phong",MeshToonMaterial:"toon",MeshStandardMaterial:"physical",MeshPhysicalMaterial:"physical",MeshMatcapMaterial:"matcap",LineBasicMaterial:"basic",LineDashedMaterial:"dashed",PointsMaterial:"points",ShadowMaterial:"shadow",SpriteMaterial:"sprite"};function p(_){return l.add(_),_===0?"uv":`uv${_}`}function x(_,E,B,N,D,k){let G=N.fog,L=D.geometry,H=_.isMeshStandardMaterial||_.isMeshLambertMaterial||_.isMeshPhongMaterial?N.environment:null,Y=_.isMeshStandardMaterial||_.isMeshLambertMaterial&&!_.envMap||_.isMeshPhongMaterial&&!_.envMap,V=t.get(_.envMap||H,Y),lt=h[_.type],J=n.precision;_.precision!==null&&(J=n.getMaxPrecision(_.precision),J!==_.precision&&qt("WebGLProgram.getParameters:",_.precision,"not supported, using",J,"instead."));let j=L.morphAttributes.position||L.morphAttributes.normal||L.morphAttributes.color,it=j!==void 0?j.length:0,ut=0;L.morphAttributes.position!==void 0&&(ut=1),L.morphAttributes.normal!==void 0&&(ut=2),L.morphAttributes.color!==void 0&&(ut=3);let ht,Q,pt,_t;if(lt){let At=Gi[lt];ht=At.vertexShader,Q=At.fragmentShader}else{ht=_.vertexShader,Q=_.fragmentShader;let At=a.getVertexShaderStage(_),se=a.getFragmentShaderStage(_);a.update(_,At,se),pt=At.id,_t=se.id}let Tt=i.getRenderTarget(),St=i.state.buffers.depth.getReversed(),Gt=D.isInstancedMesh===!0,ne=D.isBatchedMesh===!0,zt=!!_.map,ce=!!_.matcap,re=!!V,te=re&&V.isPMREMTexture===!0,He=!!_.aoMap,Ue=!!_.lightMap,tn=!!_.bumpMap&&_.wireframe===!1,Pe=!!_.normalMap,_n=!!_.displacementMap,_e=!!_.emissiveMap,cn=!!_.metalnessMap,Ye=!!_.roughnessMap,en=_.anisotropy>0,F=_.clearcoat>0,Rt=_.diffuseRoughness>0,Xt=_.dispersion>0,ie=_.retroreflectivity>0,Mt=_.iridescence>0,Le=_.sheen>0,kt=_.transmission>0,Wt=en&&!!_.anisotropyMap,A=F&&!!_.clearcoatMap,y=F&&!!_.clearcoatNormalMap,X=F&&!!_.clearcoatRoughnessMap,ct=Rt&&!!_.diffuseRoughnessMap,rt=Mt&&!!_.iridescenceMap,gt=Mt&&!!_.iridescenceThicknessMap,xt=Le&&!!_.sheenColorMap,tt=Le&&!!_.sheenRoughnessMap,nt=!!_.specularMap,dt=!!_.specularColorMap,U=!!_.specularIntensityMap,st=kt&&!!_.transmissionMap,et=kt&&!!_.thicknessMap,bt=!!_.gradientMap,mt=!!_.alphaMap,vt=_.alphaTest>0,Vt=!!_.alphaHash,Zt=!!_.extensions,at=zi;_.toneMapped&&(Tt===null||Tt.isXRRenderTarget===!0)&&(at=i.toneMapping);let Ft=te?V.isCompressedCubeTexture?V.image[0].mipmaps:V.mipmaps:null,$t={shaderID:lt,shaderType:_.type,shaderName:_.name,vertexShader:ht,fragmentShader:Q,defines:_.defines,customVertexShaderID:pt,customFragmentShaderID:_t,isRawShaderMaterial:_.isRawShaderMaterial===!0,glslVersion:_.glslVersion,precision:J,batching:ne,batchingColor:ne&&D._colorsTexture!==null,instancing:Gt,instancingColor:Gt&&D.instanceColor!==null,instancingMorph:Gt&&D.morphTexture!==null,outputColorSpace:Tt===null?i.outputColorSpace:Tt.isXRRenderTarget===!0?Tt.texture.colorSpace:ge.workingColorSpace,alphaToCoverage:!!_.alphaToCoverage,map:zt,matcap:ce,envMap:re,envMapMode:re&&V.mapping,envMapPMREM:te,envMapMaxLod:te?Ft.length-1:null,envMapSize:te?Ft[0].width:null,aoMap:He,lightMap:Ue,bumpMap:tn,normalMap:Pe,displacementMap:_n,emissiveMap:_e,normalMapObjectSpace:Pe&&_.normalMapType===Bp,normalMapTangentSpace:Pe&&_.normalMapType===Sc,packedNormalMap:Pe&&_.normalMapType===Sc&&vM(_.normalMap.format),metalnessMap:cn,roughnessMap:Ye,anisotropy:en,anisotropyMap:Wt,clearcoat:F,clearcoatMap:A,clearcoatNormalMap:y,clearcoatRoughnessMap:X,diffuseRoughness:Rt,diffuseRoughnessMap:ct,dispersion:Xt,retroreflection:ie,iridescence:Mt,iridescenceMap:rt,iridescenceThicknessMap:gt,sheen:Le,sheenColorMap:xt,sheenRoughnessMap:tt,specularMap:nt,specularColorMap:dt,specularIntensityMap:U,transmission:kt,transmissionMap:st,thicknessMap:et,gradientMap:bt,opaque:_.transparent===!1&&_.blending===to&&_.alphaToCoverage===!1,alphaMap:mt,alphaTest:vt,alphaHash:Vt,combine:_.combine,mapUv:zt&&p(_.map.channel),aoMapUv:He&&p(_.aoMap.channel),lightMapUv:Ue&&p(_.lightMap.channel),bumpMapUv:tn&&p(_.bumpMap.channel),normalMapUv:Pe&&p(_.normalMap.channel),displacementMapUv:_n&&p(_.displacementMap.channel),emissiveMapUv:_e&&p(_.emissiveMap.channel),metalnessMapUv:cn&&p(_.metalnessMap.channel),roughnessMapUv:Ye&&p(_.roughnessMap.channel),anisotropyMapUv:Wt&&p(_.anisotropyMap.channel),clearcoatMapUv:A&&p(_.clearcoatMap.channel),clearcoatNormalMapUv:y&&p(_.clearcoatNormalMap.channel),clearcoatRoughnessMapUv:X&&p(_.clearcoatRoughnessMap.channel),diffuseRoughnessMapUv:ct&&p(_.diffuseRoughnessMap.channel),iridescenceMapUv:rt&&p(_.iridescenceMap.channel),iridescenceThicknessMapUv:gt&&p(_.iridescenceThicknessMap.channel),sheenColorMapUv:xt&&p(_.sheenColorMap.channel),sheenRoughnessMapUv:tt&&p(_.sheenRoughnessMap.channel),specularMapUv:nt&&p(_.specularMap.channel),specularColorMapUv:dt&&p(_.specularColorMap.channel),specularIntensityMapUv:U&&p(_.specularIntensityMap.channel),transmissionMapUv:st&&p(_.transmissionMap.channel),thicknessMapUv:et&&p(_.thicknessMap.channel),alphaMapUv:mt&&p(_.alphaMap.channel),vertexTangents:!!L.attributes.tangent&&(Pe||en),vertexNormals:!!L.attributes.normal,vertexColors:_.vertexColors,vertexAlphas:_.vertexColors===!0&&!!L.attributes.color&&L.attributes.color.itemSize===4,pointsUvs:D.isPoints===!0&&!!L.attributes.uv&&(zt||mt),fog:!!G,useFog:_.fog===!0,fogExp2:!!G&&G.isFogExp2,flatShading:_.wireframe===!1&&(_.flatShading===!0||L.attributes.normal===void 0&&Pe===!1&&(_.isMeshLambertMaterial||_.isMeshPhongMaterial||_.isMeshStandardMaterial||_.isMeshPhysicalMaterial)),sizeAttenuation:_.sizeAttenuation===!0,logarithmicDepthBuffer:u,reversedDepthBuffer:St,skinning:D.isSkinnedMesh===!0,hasPositionAttribute:L.attributes.position!==void 0,morphTargets:L.morphAttributes.position!==void 0,morphNormals:L.morphAttributes.normal!==void 0,morphColors:L.morphAttributes.color!==void 0,morphTargetsCount:it,morphTextureStride:ut,numSunLights:E.sun.length,numDirLights:E.directional.length,numPointLights:E.point.length,numSpotLights:E.spot.length,numSpotLightMaps:E.spotLightMap.length,numRectAreaLights:E.rectArea.length,numHemiLights:E.hemi.length,numSunLightShadows:E.sunShadowMap.length,numDirLightShadows:E.directionalShadowMap.length,numPointLightShadows:E.pointShadowMap.length,numSpotLightShadows:E.spotShadowMap.length,numSpotLightShadowsWithMaps:E.numSpotLightShadowsWithMaps,numLightProbes:E.numLightProbes,numLightProbeGrids:k.filter(At=>At.texture!==null).length,numClippingPlanes:r.numPlanes,numClipIntersection:r.numIntersection,dithering:_.dithering,shadowMapEnabled:i.shadowMap.enabled&&B.length>0,shadowMapType:i.shadowMap.type,toneMapping:at,decodeVideoTexture:zt&&_.map.isVideoTexture===!0&&ge.getTransfer(_.map.colorSpace)===Te,decodeVideoTextureEmissive:_e&&_.emissiveMap.isVideoTexture===!0&&ge.getTransfer(_.emissiveMap.colorSpace)===Te,premultipliedAlpha:_.premultipliedAlpha,doubleSided:_.side===mi,flipSided:_.side===Gn,useDepthPacking:_.depthPacking>=0,depthPacking:_.depthPacking||0,index0AttributeName:_.index0AttributeName,extensionClipCullDistance:Zt&&_.extensions.clipCullDistance===!0&&e.has("WEBGL_clip_cull_distance"),extensionMultiDraw:(Zt&&_.extensions.multiDraw===!0||ne)&&e.has("WEBGL_multi_draw"),rendererExtensionParallelShaderCompile:e.has("KHR_parallel_shader_compile"),customProgramCacheKey:_.customProgramCacheKey()};return $t.vertexUv1s=l.has(1),$t.vertexUv2s=l.has(2),$t.vertexUv3s=l.has(3),l.clear(),$t}function w(_){let E=[];if(_.shaderID?E.push(_.shaderID):(E.push(_.customVertexShaderID),E.push(_.customFragmentShaderID)),_.defines!==void 0)for(let B in _.defines)E.push(B),E.push(_.defines[B]);return _.isRawShaderMaterial===!1&&(m(E,_),d(E,_),E.push(i.outputColorSpace)),E.push(_.customProgramCacheKey),E.join()}function m(_,E){_.push(E.precision),_.push(E.outputColorSpace),_.push(E.envMapMode),_.push(E.envMapPMREM),_.push(E.envMapMaxLod),_.push(E.envMapSize),_.push(E.mapUv),_.push(E.alphaMapUv),_.push(E.lightMapUv),_.push(E.aoMapUv),_.push(E.bumpMapUv),_.push(E.normalMapUv),_.push(E.displacementMapUv),_.push(E.emissiveMapUv),_.push(E.metalnessMapUv),_.push(E.roughnessMapUv),_.push(E.anisotropyMapUv),_.push(E.clearcoatMapUv),_.push(E.clearcoatNormalMapUv),_.push(E.clearcoatRoughnessMapUv),_.push(E.diffuseRoughnessMapUv),_.push(E.iridescenceMapUv),_.push(E.iridescenceThicknessMapUv),_.push(E.sheenColorMapUv),_.push(E.sheenRoughnessMapUv),_.push(E.specularMapUv),_.push(E.specularColorMapUv),_.push(E.specularIntensityMapUv),_.push(E.transmissionMapUv),_.push(E.thicknessMapUv),_.push(E.combine),_.push(E.fogExp2),_.push(E.sizeAttenuation),_.push(E.morphTargetsCount),_.push(E.numSunLights),_.push(E.numDirLights),_.push(E.numPointLights),_.push(E.numSpotLights),_.push(E.numSpotLightMaps),_.push(E.numHemiLights),_.push(E.numRectAreaLights),_.push(E.numSunLightShadows),_.push(E.numDirLightShadows),_.push(E.numPointLightShadows),_.push(E.numSpotLightShadows),_.push(E.numSpotLightShadowsWithMaps),_.push(E.numLightProbes),_.push(E.numLightProbeGrids),_.push(E.shadowMapType),_.push(E.toneMapping),_.push(E.numClippingPlanes),_.push(E.numClipIntersection),_.push(E.depthPacking)}function d(_,E){o.disableAll(),E.instancing&&o.enable(0),E.instancingColor&&o.enable(1),E.instancingMorph&&o.enable(2),E.matcap&&o.enable(3),E.envMap&&o.enable(4),E.normalMapObjectSpace&&o.enable(5),E.normalMapTangentSpace&&o.enable(6),E.clearcoat&&o.enable(7),E.iridescence&&o.enable(8),E.alphaTest&&o.enable(9),E.vertexColors&&o.enable(10),E.vertexAlphas&&o.enable(11),E.vertexUv1s&&o.enable(12),E.vertexUv2s&&o.enable(13),E.vertexUv3s&&o.enable(14),E.vertexTangents&&o.enable(15),E.anisotropy&&o.enable(16),E.alphaHash&&o.enable(17),E.batching&&o.enable(18),E.dispersion&&o.enable(19),E.retroreflection&&o.enable(24),E.diffuseRoughness&&o.enable(25),E.batchingColor&&o.enable(20),E.gradientMap&&o.enable(21),E.packedNormalMap&&o.enable(22),E.vertexNormals&&o.enable(23),_.push(o.mask),o.disableAll(),E.fog&&o.enable(0),E.useFog&&o.enable(1),E.flatShading&&o.enable(2),E.logarithmicDepthBuffer&&o.enable(3),E.reversedDepthBuffer&&o.enable(4),E.skinning&&o.enable(5),E.morphTargets&&o.enable(6),E.morphNormals&&o.enable(7),E.morphColors&&o.enable(8),E.premultipliedAlpha&&o.enable(9),E.shadowMapEnabled&&o.enable(10),E.doubleSided&&o.enable(11),E.flipSided&&o.enable(12),E.useDepthPacking&&o.enable(13),E.dithering&&o.enable(14),E.transmission&&o.enable(15),E.sheen&&o.enable(16),E.opaque&&o.enable(17),E.pointsUvs&&o.enable(18),E.decodeVideoTexture&&o.enable(19),E.decodeVideoTextureEmissive&&o.enable(20),E.alphaToCoverage&&o.enable(21),E.numLightProbeGrids>0&&o.enable(22),E.hasPositionAttribute&&o.enable(23),_.push(o.mask)}function v(_){let E=h[_.type],B;if(E){let N=Gi[E];B=Qp.clone(N.uniforms)}else B=_.uniforms;return B}function C(_,E){let B=f.get(E);return B!==void 0?++B.usedTimes:(B=new xM(i,E,_,s),c.push(B),f.set(E,B)),B}function M(_){if(--_.usedTimes===0){let E=c.indexOf(_);c[E]=c[c.length-1],c.pop(),f.delete(_.cacheKey),_.destroy()}}function P(_){a.remove(_)}function T(){a.dispose()}return{getParameters:x,getProgramCacheKey:w,getUniforms:v,acquireProgram:C,releaseProgram:M,releaseShaderCache:P,programs:c,dispose:T}}function MM(){let i=new WeakMap;function t(o){return i.has(o)}function e(o){let a=i.get(o);return a===void 0&&(a={},i.set(o,a)),a}function n(o){i.delete(o)}function s(o,a,l){i.get(o)[a]=l}function r(){i=new WeakMap}return{has:t,get:e,remove:n,update:s,dispose:r}}function bM(i,t){return i.groupOrder!==t.groupOrder?i.groupOrder-t.groupOrder:i.renderOrder!==t.renderOrder?i.renderOrder-t.renderOrder:i.material.id!==t.material.id?i.material.id-t.material.id:i.materialVariant!==t.materialVariant?i.materialVariant-t.materialVariant:i.z!==t.z?i.z-t.z:i.id-t.id}function ym(i,t){return i.groupOrder!==t.groupOrder?i.groupOrder-t.groupOrder:i.renderOrder!==t.renderOrder?i.renderOrder-t.renderOrder:i.z!==t.z?t.z-i.z:i.id-t.id}function vm(){let i=[],t=0,e=[],n=[],s=[];function r(){t=0,e.length=0,n.length=0,s.length=0}function o(h){let p=0;return h.isInstancedMesh&&(p+=2),h.isSkinnedMesh&&(p+=1),p}function a(h,p,x,w,m,d){let v=i[t];return v===void 0?(v={id:h.id,object:h,geometry:p,material:x,materialVariant:o(h),groupOrder:w,renderOrder:h.renderOrder,z:m,group:d},i[t]=v):(v.id=h.id,v.object=h,v.geometry=p,v.material=x,v.materialVariant=o(h),v.groupOrder=w,v.renderOrder=h.renderOrder,v.z=m,v.group=d),t++,v}function l(h,p,x,w,m,d,v){v.reversedDepth===!0&&(m=-m);let C=a(h,p,x,w,m,d);x.transmission>0?n.push(C):x.transparent===!0?s.push(C):e.push(C)}function c(h,p,x,w,m,d){let v=a(h,p,x,w,m,d);x.transmission>0?n.unshift(v):x.transparent===!0?s.unshift(v):e.unshift(v)}function f(h,p){e.length>1&&e.sort(h||bM),n.length>1&&n.sort(p||ym),s.length>1&&s.sort(p||ym)}function u(){for(let h=t,p=i.length;h<p;h++){let x=i[h];if(x.id===null)break;x.id=null,x.object=null,x.geometry=null,x.material=null,x.group=null}}return{opaque:e,transmissive:n,transparent:s,init:r,push:l,unshift:c,finish:u,sort:f}}function wM(){let i=new WeakMap;function t(n,s){let r=i.get(n),o;return r===void 0?(o=new vm,i.set(n,[o])):s>=r.length?(o=new vm,r.push(o)):o=r[s],o}function e(){i=new WeakMap}return{get:t,dispose:e}}function EM(){let i={};return{get:function(t){if(i[t.id]!==void 0)return i[t.id];let e;switch(t.type){case"SunLight":case"DirectionalLight":e={direction:new W,color:new ae};break;case"SpotLight":e={position:new W,direction:new W,color:new ae,distance:0,coneCos:0,penumbraCos:0,decay:0};break;case"PointLight":e={position:new W,color:new ae,distance:0,decay:0};break;case"HemisphereLight":e={direction:new W,skyColor:new ae,groundColor:new ae};break;case"RectAreaLight":e={color:new ae,position:new W,halfWidth:new W,halfHeight:new W};break}return i[t.id]=e,e}}}function TM(){let i={};return{get:function(t){if(i[t.id]!==void 0)return i[t.id];let e;switch(t.type){case"SunLight":case"DirectionalLight":e={shadowIntensity:1,shadowBias:0,shadowNormalBias:0,shadowRadius:1,shadowMapSize:new Jt};break;case"SpotLight":e={shadowIntensity:1,shadowBias:0,shadowNormalBias:0,shadowRadius:1,shadowMapSize:new Jt};break;case"PointLight":e={shadowIntensity:1,shadowBias:0,shadowNormalBias:0,shadowRadius:1,shadowMapSize:new Jt,shadowCameraNear:1,shadowCameraFar:1e3};break}return i[t.id]=e,e}}}var AM=0;function RM(i,t){return(t.castShadow?2:0)-(i.castShadow?2:0)+(t.map?1:0)-(i.map?1:0)}function CM(i){let t=new EM,e=TM(),n={version:0,hash:{sunLength:-1,directionalLength:-1,pointLength:-1,spotLength:-1,rectAreaLength:-1,hemiLength:-1,numSunShadows:-1,numDirectionalShadows:-1,numPointShadows:-1,numSpotShadows:-1,numSpotMaps:-1,numLightProbes:-1},ambient:[0,0,0],probe:[],sun:[],sunShadow:[],sunShadowMap:[],sunShadowMatrix:[],sunShadowCascade:[],directional:[],directionalShadow:[],directionalShadowMap:[],directionalShadowMatrix:[],spot:[],spotLightMap:[],spotShadow:[],spotShadowMap:[],spotLightMatrix:[],rectArea:[],rectAreaLTC1:null,rectAreaLTC2:null,point:[],pointShadow:[],pointShadowMap:[],pointShadowMatrix:[],hemi:[],numSpotLightShadowsWithMaps:0,numLightProbes:0};for(let c=0;c<9;c++)n.probe.push(new W);let s=new W,r=new Se,o=new Se;function a(c){let f=0,u=0,h=0;for(let k=0;k<9;k++)n.probe[k].set(0,0,0);let p=0,x=0,w=0,m=0,d=0,v=0,C=0,M=0,P=0,T=0,_=0,E=0,B=0,N=0;c.sort(RM);for(let k=0,G=c.length;k<G;k++){let L=c[k],H=L.color,Y=L.intensity,V=L.distance,lt=null;if(L.shadow&&L.shadow.map&&(L.shadow.map.texture.format===Ls?lt=L.shadow.map.texture:lt=L.shadow.map.depthTexture||L.shadow.map.texture),L.isAmbientLight)f+=H.r*Y,u+=H.g*Y,h+=H.b*Y;else if(L.isLightProbe){for(let J=0;J<9;J++)n.probe[J].addScaledVector(L.sh.coefficients[J],Y);N++}else if(L.isSunLight){let J=t.get(L);if(J.color.copy(L.color).multiplyScalar(L.intensity),L.castShadow){let j=L.shadow,it=e.get(L);it.shadowIntensity=j.intensity,it.shadowBias=j.bias,it.shadowNormalBias=j.normalBias,it.shadowRadius=j.radius,it.shadowMapSize.copy(j.mapSize).multiply(j.getFrameExtents()),n.sunShadow[x]=it,n.sunShadowMap[x]=lt;let ut=j.getViewportCount();for(let ht=0;ht<ut;ht++)n.sunShadowMatrix[w+ht]=j.getMatrix(ht),n.sunShadowCascade[w+ht]=j._cascadeData[ht];w+=ut,x++}n.sun[p]=J,p++}else if(L.isDirectionalLight){let J=t.get(L);if(J.color.copy(L.color).multiplyScalar(L.intensity),L.castShadow){let j=L.shadow,it=e.get(L);it.shadowIntensity=j.intensity,it.shadowBias=j.bias,it.shadowNormalBias=j.normalBias,it.shadowRadius=j.radius,it.shadowMapSize=j.mapSize,n.directionalShadow[m]=it,n.directionalShadowMap[m]=lt,n.directionalShadowMatrix[m]=L.shadow.matrix,P++}n.directional[m]=J,m++}else if(L.isSpotLight){let J=t.get(L);J.position.setFromMatrixPosition(L.matrixWorld),J.color.copy(H).multiplyScalar(Y),J.distance=V,J.coneCos=Math.cos(L.angle),J.penumbraCos=Math.cos(L.angle*(1-L.penumbra)),J.decay=L.decay,n.spot[v]=J;let j=L.shadow;if(L.map&&(n.spotLightMap[E]=L.map,E++,j.updateMatrices(L),L.castShadow&&B++),n.spotLightMatrix[v]=j.matrix,L.castShadow){let it=e.get(L);it.shadowIntensity=j.intensity,it.shadowBias=j.bias,it.shadowNormalBias=j.normalBias,it.shadowRadius=j.radius,it.shadowMapSize=j.mapSize,n.spotShadow[v]=it,n.spotShadowMap[v]=lt,_++}v++}else if(L.isRectAreaLight){let J=t.get(L);J.color.copy(H).multiplyScalar(Y),J.halfWidth.set(L.width*.5,0,0),J.halfHeight.set(0,L.height*.5,0),n.rectArea[C]=J,C++}else if(L.isPointLight){let J=t.get(L);if(J.color.copy(L.color).multiplyScalar(L.intensity),J.distance=L.distance,J.decay=L.decay,L.castShadow){let j=L.shadow,it=e.get(L);it.shadowIntensity=j.intensity,it.shadowBias=j.bias,it.shadowNormalBias=j.normalBias,it.shadowRadius=j.radius,it.shadowMapSize=j.mapSize,it.shadowCameraNear=j.camera.near,it.shadowCameraFar=j.camera.far,n.pointShadow[d]=it,n.pointShadowMap[d]=lt,n.pointShadowMatrix[d]=L.shadow.matrix,T++}n.point[d]=J,d++}else if(L.isHemisphereLight){let J=t.get(L);J.skyColor.copy(L.color).multiplyScalar(Y),J.groundColor.copy(L.groundColor).multiplyScalar(Y),n.hemi[M]=J,M++}}C>0&&(i.has("OES_texture_float_linear")===!0?(n.rectAreaLTC1=It.LTC_FLOAT_1,n.rectAreaLTC2=It.LTC_FLOAT_2):(n.rectAreaLTC1=It.LTC_HALF_1,n.rectAreaLTC2=It.LTC_HALF_2)),n.ambient[0]=f,n.ambient[1]=u,n.ambient[2]=h;let D=n.hash;(D.sunLength!==p||D.directionalLength!==m||D.pointLength!==d||D.spotLength!==v||D.rectAreaLength!==C||D.hemiLength!==M||D.numSunShadows!==x||D.numDirectionalShadows!==P||D.numPointShadows!==T||D.numSpotShadows!==_||D.numSpotMaps!==E||D.numLightProbes!==N)&&(n.sun.length=p,n.directional.length=m,n.spot.length=v,n.rectArea.length=C,n.point.length=d,n.hemi.length=M,n.sunShadow.length=x,n.sunShadowMap.length=x,n.sunShadowMatrix.length=w,n.sunShadowCascade.length=w,n.directionalShadow.length=P,n.directionalShadowMap.length=P,n.directionalShadowMatrix.length=P,n.pointShadow.length=T,n.pointShadowMap.length=T,n.pointShadowMatrix.length=T,n.spotShadow.length=_,n.spotShadowMap.length=_,n.spotLightMatrix.length=_+E-B,n.spotLightMap.length=E,n.numSpotLightShadowsWithMaps=B,n.numLightProbes=N,D.sunLength=p,D.directionalLength=m,D.pointLength=d,D.spotLength=v,D.rectAreaLength=C,D.hemiLength=M,D.numSunShadows=x,D.numDirectionalShadows=P,D.numPointShadows=T,D.numSpotShadows=_,D.numSpotMaps=E,D.numLightProbes=N,n.version=AM++)}function l(c,f){let u=0,h=0,p=0,x=0,w=0,m=0,d=f.matrixWorldInverse;for(let v=0,C=c.length;v<C;v++){let M=c[v];if(M.isSunLight){let P=n.sun[u];P.direction.setFromMatrixPosition(M.matrixWorld),P.direction.transformDirection(d),u++}else if(M.isDirectionalLight){let P=n.directional[h];P.direction.setFromMatrixPosition(M.matrixWorld),s.setFromMatrixPosition(M.target.matrixWorld),P.direction.sub(s),P.direction.transformDirection(d),h++}else if(M.isSpotLight){let P=n.spot[x];P.position.setFromMatrixPosition(M.matrixWorld),P.position.applyMatrix4(d),P.direction.setFromMatrixPosition(M.matrixWorld),s.setFromMatrixPosition(M.target.matrixWorld),P.direction.sub(s),P.direction.transformDirection(d),x++}else if(M.isRectAreaLight){let P=n.rectArea[w];P.position.setFromMatrixPosition(M.matrixWorld),P.position.applyMatrix4(d),o.identity(),r.copy(M.matrixWorld),r.premultiply(d),o.extractRotation(r),P.halfWidth.set(M.width*.5,0,0),P.halfHeight.set(0,M.height*.5,0),P.halfWidth.applyMatrix4(o),P.halfHeight.applyMatrix4(o),w++}else if(M.isPointLight){let P=n.point[p];P.position.setFromMatrixPosition(M.matrixWorld),P.position.applyMatrix4(d),p++}else if(M.isHemisphereLight){let P=n.hemi[m];P.direction.setFromMatrixPosition(M.matrixWorld),P.direction.transformDirection(d),m++}}}return{setup:a,setupView:l,state:n}}function Sm(i){let t=new CM(i),e=[],n=[],s=[];function r(u){f.camera=u,e.length=0,n.length=0,s.length=0}function o(u){u.isLightProbeGrid?s.push(u):e.push(u)}function a(u){n.push(u)}function l(){t.setup(e),s.sort((u,h)=>u.priority-h.priority||u.id-h.id)}function c(u){t.setupView(e,u)}let f={lightsArray:e,shadowsArray:n,lightProbeGridArray:s,camera:null,lights:t,transmissionRenderTarget:{},textureUnits:0};return{init:r,state:f,setupLights:l,setupLightsView:c,pushLight:o,pushShadow:a}}function PM(i){let t=new WeakMap;function e(s,r=0){let o=t.get(s),a;return o===void 0?(a=new Sm(i),t.set(s,[a])):r>=o.length?(a=new Sm(i),o.push(a)):a=o[r],a}function n(){t=new WeakMap}return{get:e,dispose:n}}var IM=`void main() {
	gl_Position = vec4( position, 1.0 );
}`,LM=`uniform sampler2D shadow_pass;
uniform vec2 resolution;
uniform float radius;
void main() {
	const float samples = float( VSM_SAMPLES );
	float mean = 0.0;
	float squared_mean = 0.0;
	float uvStride = samples <= 1.0 ? 0.0 : 2.0 / ( samples - 1.0 );
	float uvStart = samples <= 1.0 ? 0.0 : - 1.0;
	for ( float i = 0.0; i < samples; i ++ ) {
		float uvOffset = uvStart + i * uvStride;
		#ifdef HORIZONTAL_PASS
			vec2 distribution = texture2D( shadow_pass, ( gl_FragCoord.xy + vec2( uvOffset, 0.0 ) * radius ) / resolution ).rg;
			mean += distribution.x;
			squared_mean += distribution.y * distribution.y + distribution.x * distribution.x;
		#else
			float depth = texture2D( shadow_pass, ( gl_FragCoord.xy + vec2( 0.0, uvOffset ) * radius ) / resolution ).r;
			mean += depth;
			squared_mean += depth * depth;
		#endif
	}
	mean = mean / samples;
	squared_mean = squared_mean / samples;
	float std_dev = sqrt( max( 0.0, squared_mean - mean * mean ) );
	gl_FragColor = vec4( mean, std_dev, 0.0, 1.0 );
}`,DM=[new W(1,0,0),new W(-1,0,0),new W(0,1,0),new W(0,-1,0),new W(0,0,1),new W(0,0,-1)],NM=[new W(0,-1,0),new W(0,-1,0),new W(0,0,1),new W(0,0,-1),new W(0,-1,0),new W(0,-1,0)],Mm=new Se,la=new W,Lu=new W;function UM(i,t,e){let n=new Es,s=new Jt,r=new Jt,o=new Xe,a=new vl,l=new Sl,c={},f=e.maxTextureSize,u={[Is]:Gn,[Gn]:Is,[mi]:mi},h=new pi({defines:{VSM_SAMPLES:8},uniforms:{shadow_pass:{value:null},resolution:{value:new Jt},radius:{value:4}},vertexShader:IM,fragmentShader:LM}),p=h.clone();p.defines.HORIZONTAL_PASS=1;let x=new di;x.setAttribute("position",new Hn(new Float32Array([-1,-1,.5,3,-1,.5,-1,3,.5]),3));let w=new In(x,h),m=this;this.enabled=!1,this.autoUpdate=!0,this.needsUpdate=!1,this.type=ta;let d=this.type;this.render=function(T,_,E){if(m.enabled===!1||m.autoUpdate===!1&&m.needsUpdate===!1||T.length===0)return;this.type===mp&&(qt("WebGLShadowMap: PCFSoftShadowMap has been removed. Using PCFShadowMap instead."),this.type=ta);let B=i.getRenderTarget(),N=i.getActiveCubeFace(),D=i.getActiveMipmapLevel(),k=i.state;k.setBlending(Ks),k.buffers.depth.getReversed()===!0?k.buffers.color.setClear(0,0,0,0):k.buffers.color.setClear(1,1,1,1),k.buffers.depth.setTest(!0),k.setScissorTest(!1);let G=d!==this.type;G&&_.traverse(function(L){L.material&&(Array.isArray(L.material)?L.material.forEach(H=>H.needsUpdate=!0):L.material.needsUpdate=!0)});for(let L=0,H=T.length;L<H;L++){let Y=T[L],V=Y.shadow;if(V===void 0){qt("WebGLShadowMap:",Y,"has no shadow.");continue}if(V.autoUpdate===!1&&V.needsUpdate===!1)continue;s.copy(V.mapSize);let lt=V.getFrameExtents();s.multiply(lt),r.copy(V.mapSize),(s.x>f||s.y>f)&&(s.x>f&&(r.x=Math.floor(f/lt.x),s.x=r.x*lt.x,V.mapSize.x=r.x),s.y>f&&(r.y=Math.floor(f/lt.y),s.y=r.y*lt.y,V.mapSize.y=r.y));let J=i.state.buffers.depth.getReversed();if(V.camera._reversedDepth=J,V.map===null||G===!0){if(V.map!==null&&(V.map.depthTexture!==null&&(V.map.depthTexture.dispose(),V.map.depthTexture=null),V.map.dispose()),this.type===Qr){if(Y.isPointLight){qt("WebGLShadowMap: VSM shadow maps are not supported for PointLights. Use PCF or BasicShadowMap instead.");continue}V.map=new Vn(s.x,s.y,{format:Ls,type:Ri,minFilter:zn,magFilter:zn,generateMipmaps:!1}),V.map.texture.name=Y.name+".shadowMap",V.map.depthTexture=new ss(s.x,s.y,gi),V.map.depthTexture.name=Y.name+".shadowMapDepth",V.map.depthTexture.format=ns,V.map.depthTexture.compareFunction=null,V.map.depthTexture.minFilter=wn,V.map.depthTexture.magFilter=wn}else Y.isPointLight?(V.map=new ha(s.x),V.map.depthTexture=new Xo(s.x,Ai)):(V.map=new Vn(s.x,s.y),V.map.depthTexture=new ss(s.x,s.y,Ai)),V.map.depthTexture.name=Y.name+".shadowMap",V.map.depthTexture.format=ns,this.type===ta?(V.map.depthTexture.compareFunction=J?yu:xu,V.map.depthTexture.minFilter=zn,V.map.depthTexture.magFilter=zn):(V.map.depthTexture.compareFunction=null,V.map.depthTexture.minFilter=wn,V.map.depthTexture.magFilter=wn);V.camera.updateProjectionMatrix()}V.map.isWebGLCubeRenderTarget!==!0&&(V.map.width!==s.x||V.map.height!==s.y)&&V.map.setSize(s.x,s.y);let j=V.map.isWebGLCubeRenderTarget?6:V.getViewportCount();Y.isPointLight!==!0&&V.updateMatrices(Y,E);let it=(V.camera.layers.mask&4294967294)!==0?V.camera.layers:E.layers;for(let ut=0;ut<j;ut++){let ht=V.getCamera(ut);if(Y.isPointLight){let Q=V.camera,pt=V.matrix,_t=Y.distance||Q.far;_t!==Q.far&&(Q.far=_t,Q.updateProjectionMatrix()),la.setFromMatrixPosition(Y.matrixWorld),Q.position.copy(la),Lu.copy(Q.position),Lu.add(DM[ut]),Q.up.copy(NM[ut]),Q.lookAt(Lu),Q.updateMatrixWorld(),pt.makeTranslation(-la.x,-la.y,-la.z),Mm.multiplyMatrices(Q.projectionMatrix,Q.matrixWorldInverse),V._frustum.setFromProjectionMatrix(Mm,Q.coordinateSystem,Q.reversedDepth)}if(V.map.isWebGLCubeRenderTarget)i.setRenderTarget(V.map,ut),i.clear();else{ut===0&&(i.setRenderTarget(V.map),i.clear());let Q=V.getViewport(ut);o.set(r.x*Q.x,r.y*Q.y,r.x*Q.z,r.y*Q.w),k.viewport(o)}n=V.getFrustum(ut),M(_,E,ht,Y,it,this.type)}V.isPointLightShadow!==!0&&this.type===Qr&&v(V,E),V.needsUpdate=!1}d=this.type,m.needsUpdate=!1,i.setRenderTarget(B,N,D)};function v(T,_){let E=t.update(w);h.defines.VSM_SAMPLES!==T.blurSamples&&(h.defines.VSM_SAMPLES=T.blurSamples,p.defines.VSM_SAMPLES=T.blurSamples,h.needsUpdate=!0,p.needsUpdate=!0),T.mapPass===null?T.mapPass=new Vn(s.x,s.y,{format:Ls,type:Ri}):(T.mapPass.width!==T.map.width||T.mapPass.height!==T.map.height)&&T.mapPass.setSize(T.map.width,T.map.height),h.uniforms.shadow_pass.value=T.map.depthTexture,h.uniforms.resolution.value.set(T.map.width,T.map.height),h.uniforms.radius.value=T.radius,i.setRenderTarget(T.mapPass),i.clear(),i.renderBufferDirect(_,null,E,h,w,null),p.uniforms.shadow_pass.value=T.mapPass.texture,p.uniforms.resolution.value.set(T.map.width,T.map.height),p.uniforms.radius.value=T.radius,i.setRenderTarget(T.map),i.clear(),i.renderBufferDirect(_,null,E,p,w,null)}function C(T,_,E,B){let N=null,D=E.isPointLight===!0?T.customDistanceMaterial:T.customDepthMaterial;if(D!==void 0)N=D;else if(N=E.isPointLight===!0?l:a,i.localClippingEnabled&&_.clipShadows===!0&&Array.isArray(_.clippingPlanes)&&_.clippingPlanes.length!==0||_.displacementMap&&_.displacementScale!==0||_.alphaMap&&_.alphaTest>0||_.map&&_.alphaTest>0||_.alphaToCoverage===!0){let k=N.uuid,G=_.uuid,L=c[k];L===void 0&&(L={},c[k]=L);let H=L[G];H===void 0&&(H=N.clone(),L[G]=H,_.addEventListener("dispose",P)),N=H}if(N.visible=_.visible,N.wireframe=_.wireframe,B===Qr?N.side=_.shadowSide!==null?_.shadowSide:_.side:N.side=_.shadowSide!==null?_.shadowSide:u[_.side],N.alphaMap=_.alphaMap,N.alphaTest=_.alphaToCoverage===!0?.5:_.alphaTest,N.map=_.map,N.clipShadows=_.clipShadows,N.clippingPlanes=_.clippingPlanes,N.clipIntersection=_.clipIntersection,N.displacementMap=_.displacementMap,N.displacementScale=_.displacementScale,N.displacementBias=_.displacementBias,N.wireframeLinewidth=_.wireframeLinewidth,N.linewidth=_.linewidth,E.isPointLight===!0&&N.isMeshDistanceMaterial===!0){let k=i.properties.get(N);k.light=E}return N}function M(T,_,E,B,N,D){if(T.visible===!1)return;if(T.layers.test(N)&&(T.isMesh||T.isLine||T.isPoints)&&(T.castShadow||T.receiveShadow&&D===Qr)&&(!T.frustumCulled||T.intersectsFrustum(n))){T.modelViewMatrix.multiplyMatrices(E.matrixWorldInverse,T.matrixWorld);let L=t.update(T),H=T.material;if(Array.isArray(H)){let Y=L.groups;for(let V=0,lt=Y.length;V<lt;V++){let J=Y[V],j=H[J.materialIndex];if(j&&j.visible){let it=C(T,j,B,D);T.onBeforeShadow(i,T,_,E,L,it,J),i.renderBufferDirect(E,null,L,it,T,J),T.onAfterShadow(i,T,_,E,L,it,J)}}}else if(H.visible){let Y=C(T,H,B,D);T.onBeforeShadow(i,T,_,E,L,Y,null),i.renderBufferDirect(E,null,L,Y,T,null),T.onAfterShadow(i,T,_,E,L,Y,null)}}let G=T.children;for(let L=0,H=G.length;L<H;L++)M(G[L],_,E,B,N,D)}function P(T){T.target.removeEventListener("dispose",P);for(let E in c){let B=c[E],N=T.target.uuid;N in B&&(B[N].dispose(),delete B[N])}}}function FM(i,t){function e(){let U=!1,st=new Xe,et=null,bt=new Xe(0,0,0,0);return{setMask:function(mt){et!==mt&&!U&&(i.colorMask(mt,mt,mt,mt),et=mt)},setLocked:function(mt){U=mt},setClear:function(mt,vt,Vt,Zt,at){at===!0&&(mt*=Zt,vt*=Zt,Vt*=Zt),st.set(mt,vt,Vt,Zt),bt.equals(st)===!1&&(i.clearColor(mt,vt,Vt,Zt),bt.copy(st))},reset:function(){U=!1,et=null,bt.set(-1,0,0,0)}}}function n(){let U=!1,st=!1,et=null,bt=null,mt=null;return{setReversed:function(vt){if(st!==vt){let Vt=t.get("EXT_clip_control");vt?Vt.clipControlEXT(Vt.LOWER_LEFT_EXT,Vt.ZERO_TO_ONE_EXT):Vt.clipControlEXT(Vt.LOWER_LEFT_EXT,Vt.NEGATIVE_ONE_TO_ONE_EXT),st=vt;let Zt=mt;mt=null,this.setClear(Zt)}},getReversed:function(){return st},setTest:function(vt){vt?St(i.DEPTH_TEST):Gt(i.DEPTH_TEST)},setMask:function(vt){et!==vt&&!U&&(i.depthMask(vt),et=vt)},setFunc:function(vt){if(st&&(vt=$p[vt]),bt!==vt){switch(vt){case rl:i.depthFunc(i.NEVER);break;case ol:i.depthFunc(i.ALWAYS);break;case al:i.depthFunc(i.LESS);break;case zr:i.depthFunc(i.LEQUAL);break;case ll:i.depthFunc(i.EQUAL);break;case cl:i.depthFunc(i.GEQUAL);break;case hl:i.depthFunc(i.GREATER);break;case ul:i.depthFunc(i.NOTEQUAL);break;default:i.depthFunc(i.LEQUAL)}bt=vt}},setLocked:function(vt){U=vt},setClear:function(vt){mt!==vt&&(mt=vt,st&&(vt=1-vt),i.clearDepth(vt))},reset:function(){U=!1,et=null,bt=null,mt=null,st=!1}}}function s(){let U=!1,st=null,et=null,bt=null,mt=null,vt=null,Vt=null,Zt=null,at=null;return{setTest:function(Ft){U||(Ft?St(i.STENCIL_TEST):Gt(i.STENCIL_TEST))},setMask:function(Ft){st!==Ft&&!U&&(i.stencilMask(Ft),st=Ft)},setFunc:function(Ft,$t,At){(et!==Ft||bt!==$t||mt!==At)&&(i.stencilFunc(Ft,$t,At),et=Ft,bt=$t,mt=At)},setOp:function(Ft,$t,At){(vt!==Ft||Vt!==$t||Zt!==At)&&(i.stencilOp(Ft,$t,At),vt=Ft,Vt=$t,Zt=At)},setLocked:function(Ft){U=Ft},setClear:function(Ft){at!==Ft&&(i.clearStencil(Ft),at=Ft)},reset:function(){U=!1,st=null,et=null,bt=null,mt=null,vt=null,Vt=null,Zt=null,at=null}}}let r=new e,o=new n,a=new s,l={},c=new WeakMap,f={},u={},h={},p=new WeakMap,x=[],w=null,m=!1,d=null,v=null,C=null,M=null,P=null,T=null,_=null,E=new ae(0,0,0),B=0,N=!1,D=null,k=null,G=null,L=null,H=null,Y=i.getParameter(i.MAX_COMBINED_TEXTURE_IMAGE_UNITS),V=!1,lt=0,J=i.getParameter(i.VERSION);J.indexOf("WebGL")!==-1?(lt=parseFloat(/^WebGL (\d)/.exec(J)[1]),V=lt>=1):J.indexOf("OpenGL ES")!==-1&&(lt=parseFloat(/^OpenGL ES (\d)/.exec(J)[1]),V=lt>=2);let j=null,it={},ut=i.getParameter(i.SCISSOR_BOX),ht=i.getParameter(i.VIEWPORT),Q=new Xe().fromArray(ut),pt=new Xe().fromArray(ht);function _t(U,st,et,bt){let mt=new Uint8Array(4),vt=i.createTexture();i.bindTexture(U,vt),i.texParameteri(U,i.TEXTURE_MIN_FILTER,i.NEAREST),i.texParameteri(U,i.TEXTURE_MAG_FILTER,i.NEAREST);for(let Vt=0;Vt<et;Vt++)U===i.TEXTURE_3D||U===i.TEXTURE_2D_ARRAY?i.texImage3D(st,0,i.RGBA,1,1,bt,0,i.RGBA,i.UNSIGNED_BYTE,mt):i.texImage2D(st+Vt,0,i.RGBA,1,1,0,i.RGBA,i.UNSIGNED_BYTE,mt);return vt}let Tt={};Tt[i.TEXTURE_2D]=_t(i.TEXTURE_2D,i.TEXTURE_2D,1),Tt[i.TEXTURE_CUBE_MAP]=_t(i.TEXTURE_CUBE_MAP,i.TEXTURE_CUBE_MAP_POSITIVE_X,6),Tt[i.TEXTURE_2D_ARRAY]=_t(i.TEXTURE_2D_ARRAY,i.TEXTURE_2D_ARRAY,1,1),Tt[i.TEXTURE_3D]=_t(i.TEXTURE_3D,i.TEXTURE_3D,1,1),r.setClear(0,0,0,1),o.setClear(1),a.setClear(0),St(i.DEPTH_TEST),o.setFunc(zr),tn(!1),Pe(jh),St(i.CULL_FACE),He(Ks);function St(U){f[U]!==!0&&(i.enable(U),f[U]=!0)}function Gt(U){f[U]!==!1&&(i.disable(U),f[U]=!1)}function ne(U,st){return h[U]!==st?(i.bindFramebuffer(U,st),h[U]=st,U===i.DRAW_FRAMEBUFFER&&(h[i.FRAMEBUFFER]=st),U===i.FRAMEBUFFER&&(h[i.DRAW_FRAMEBUFFER]=st),!0):!1}function zt(U,st){let et=x,bt=!1;if(U){et=p.get(st),et===void 0&&(et=[],p.set(st,et));let mt=U.textures;if(et.length!==mt.length||et[0]!==i.COLOR_ATTACHMENT0){for(let vt=0,Vt=mt.length;vt<Vt;vt++)et[vt]=i.COLOR_ATTACHMENT0+vt;et.length=mt.length,bt=!0}}else et[0]!==i.BACK&&(et[0]=i.BACK,bt=!0);bt&&i.drawBuffers(et)}function ce(U){return w!==U?(i.useProgram(U),w=U,!0):!1}let re={[js]:i.FUNC_ADD,[_p]:i.FUNC_SUBTRACT,[xp]:i.FUNC_REVERSE_SUBTRACT};re[yp]=i.MIN,re[vp]=i.MAX;let te={[Sp]:i.ZERO,[Mp]:i.ONE,[bp]:i.SRC_COLOR,[nu]:i.SRC_ALPHA,[Cp]:i.SRC_ALPHA_SATURATE,[Ap]:i.DST_COLOR,[Ep]:i.DST_ALPHA,[wp]:i.ONE_MINUS_SRC_COLOR,[iu]:i.ONE_MINUS_SRC_ALPHA,[Rp]:i.ONE_MINUS_DST_COLOR,[Tp]:i.ONE_MINUS_DST_ALPHA,[Pp]:i.CONSTANT_COLOR,[Ip]:i.ONE_MINUS_CONSTANT_COLOR,[Lp]:i.CONSTANT_ALPHA,[Dp]:i.ONE_MINUS_CONSTANT_ALPHA};function He(U,st,et,bt,mt,vt,Vt,Zt,at,Ft){if(U===Ks){m===!0&&(Gt(i.BLEND),m=!1);return}if(m===!1&&(St(i.BLEND),m=!0),U!==gp){if(U!==d||Ft!==N){if((v!==js||P!==js)&&(i.blendEquation(i.FUNC_ADD),v=js,P=js),Ft)switch(U){case to:i.blendFuncSeparate(i.ONE,i.ONE_MINUS_SRC_ALPHA,i.ONE,i.ONE_MINUS_SRC_ALPHA);break;case Qh:i.blendFunc(i.ONE,i.ONE);break;case tu:i.blendFuncSeparate(i.ZERO,i.ONE_MINUS_SRC_COLOR,i.ZERO,i.ONE);break;case eu:i.blendFuncSeparate(i.DST_COLOR,i.ONE_MINUS_SRC_ALPHA,i.ZERO,i.ONE);break;default:jt("WebGLState: Invalid blending: ",U);break}else switch(U){case to:i.blendFuncSeparate(i.SRC_ALPHA,i.ONE_MINUS_SRC_ALPHA,i.ONE,i.ONE_MINUS_SRC_ALPHA);break;case Qh:i.blendFuncSeparate(i.SRC_ALPHA,i.ONE,i.ONE,i.ONE);break;case tu:jt("WebGLState: SubtractiveBlending requires material.premultipliedAlpha = true");break;case eu:jt("WebGLState: MultiplyBlending requires material.premultipliedAlpha = true");break;default:jt("WebGLState: Invalid blending: ",U);break}C=null,M=null,T=null,_=null,E.set(0,0,0),B=0,d=U,N=Ft}return}mt=mt||st,vt=vt||et,Vt=Vt||bt,(st!==v||mt!==P)&&(i.blendEquationSeparate(re[st],re[mt]),v=st,P=mt),(et!==C||bt!==M||vt!==T||Vt!==_)&&(i.blendFuncSeparate(te[et],te[bt],te[vt],te[Vt]),C=et,M=bt,T=vt,_=Vt),(Zt.equals(E)===!1||at!==B)&&(i.blendColor(Zt.r,Zt.g,Zt.b,at),E.copy(Zt),B=at),d=U,N=!1}function Ue(U,st){U.side===mi?Gt(i.CULL_FACE):St(i.CULL_FACE);let et=U.side===Gn;st&&(et=!et),tn(et),U.blending===to&&U.transparent===!1?He(Ks):He(U.blending,U.blendEquation,U.blendSrc,U.blendDst,U.blendEquationAlpha,U.blendSrcAlpha,U.blendDstAlpha,U.blendColor,U.blendAlpha,U.premultipliedAlpha),o.setFunc(U.depthFunc),o.setTest(U.depthTest),o.setMask(U.depthWrite),r.setMask(U.colorWrite);let bt=U.stencilWrite;a.setTest(bt),bt&&(a.setMask(U.stencilWriteMask),a.setFunc(U.stencilFunc,U.stencilRef,U.stencilFuncMask),a.setOp(U.stencilFail,U.stencilZFail,U.stencilZPass)),_e(U.polygonOffset,U.polygonOffsetFactor,U.polygonOffsetUnits),U.alphaToCoverage===!0?St(i.SAMPLE_ALPHA_TO_COVERAGE):Gt(i.SAMPLE_ALPHA_TO_COVERAGE)}function tn(U){D!==U&&(U?i.frontFace(i.CW):i.frontFace(i.CCW),D=U)}function Pe(U){U!==dp?(St(i.CULL_FACE),U!==k&&(U===jh?i.cullFace(i.BACK):U===pp?i.cullFace(i.FRONT):i.cullFace(i.FRONT_AND_BACK))):Gt(i.CULL_FACE),k=U}function _n(U){U!==G&&(V&&i.lineWidth(U),G=U)}function _e(U,st,et){U?(St(i.POLYGON_OFFSET_FILL),(L!==st||H!==et)&&(L=st,H=et,o.getReversed()&&(st=-st,et=-et),i.polygonOffset(st,et))):Gt(i.POLYGON_OFFSET_FILL)}function cn(U){U?St(i.SCISSOR_TEST):Gt(i.SCISSOR_TEST)}function Ye(U){U===void 0&&(U=i.TEXTURE0+Y-1),j!==U&&(i.activeTexture(U),j=U)}function en(U,st,et){et===void 0&&(j===null?et=i.TEXTURE0+Y-1:et=j);let bt=it[et];bt===void 0&&(bt={type:void 0,texture:void 0},it[et]=bt),(bt.type!==U||bt.texture!==st)&&(j!==et&&(i.activeTexture(et),j=et),i.bindTexture(U,st||Tt[U]),bt.type=U,bt.texture=st)}function F(){let U=it[j];U!==void 0&&U.type!==void 0&&(i.bindTexture(U.type,null),U.type=void 0,U.texture=void 0)}function Rt(){try{i.compressedTexImage2D(...arguments)}catch(U){jt("WebGLState:",U)}}function Xt(){try{i.compressedTexImage3D(...arguments)}catch(U){jt("WebGLState:",U)}}function ie(){try{i.texSubImage2D(...arguments)}catch(U){jt("WebGLState:",U)}}function Mt(){try{i.texSubImage3D(...arguments)}catch(U){jt("WebGLState:",U)}}function Le(){try{i.compressedTexSubImage2D(...arguments)}catch(U){jt("WebGLState:",U)}}function kt(){try{i.compressedTexSubImage3D(...arguments)}catch(U){jt("WebGLState:",U)}}function Wt(){try{i.texStorage2D(...arguments)}catch(U){jt("WebGLState:",U)}}function A(){try{i.texStorage3D(...arguments)}catch(U){jt("WebGLState:",U)}}function y(){try{i.texImage2D(...arguments)}catch(U){jt("WebGLState:",U)}}function X(){try{i.texImage3D(...arguments)}catch(U){jt("WebGLState:",U)}}function ct(U){return u[U]!==void 0?u[U]:i.getParameter(U)}function rt(U,st){u[U]!==st&&(i.pixelStorei(U,st),u[U]=st)}function gt(U){Q.equals(U)===!1&&(i.scissor(U.x,U.y,U.z,U.w),Q.copy(U))}function xt(U){pt.equals(U)===!1&&(i.viewport(U.x,U.y,U.z,U.w),pt.copy(U))}function tt(U,st){let et=c.get(st);et===void 0&&(et=new WeakMap,c.set(st,et));let bt=et.get(U);bt===void 0&&(bt=i.getUniformBlockIndex(st,U.name),i.uniformBlockBinding(st,bt,bt),et.set(U,bt))}function nt(U,st,et){let mt=c.get(st).get(U);l[mt]!==et&&(i.bindBufferBase(i.UNIFORM_BUFFER,mt,et),l[mt]=et)}function dt(){i.disable(i.BLEND),i.disable(i.CULL_FACE),i.disable(i.DEPTH_TEST),i.disable(i.POLYGON_OFFSET_FILL),i.disable(i.SCISSOR_TEST),i.disable(i.STENCIL_TEST),i.disable(i.SAMPLE_ALPHA_TO_COVERAGE),i.blendEquation(i.FUNC_ADD),i.blendFunc(i.ONE,i.ZERO),i.blendFuncSeparate(i.ONE,i.ZERO,i.ONE,i.ZERO),i.blendColor(0,0,0,0),i.colorMask(!0,!0,!0,!0),i.clearColor(0,0,0,0),i.depthMask(!0),i.depthFunc(i.LESS),o.setReversed(!1),i.clearDepth(1),i.stencilMask(4294967295),i.stencilFunc(i.ALWAYS,0,4294967295),i.stencilOp(i.KEEP,i.KEEP,i.KEEP),i.clearStencil(0),i.cullFace(i.BACK),i.frontFace(i.CCW),i.polygonOffset(0,0),i.activeTexture(i.TEXTURE0),i.bindFramebuffer(i.FRAMEBUFFER,null),i.bindFramebuffer(i.DRAW_FRAMEBUFFER,null),i.bindFramebuffer(i.READ_FRAMEBUFFER,null),i.useProgram(null),i.lineWidth(1),i.scissor(0,0,i.canvas.width,i.canvas.height),i.viewport(0,0,i.canvas.width,i.canvas.height),i.pixelStorei(i.PACK_ALIGNMENT,4),i.pixelStorei(i.UNPACK_ALIGNMENT,4),i.pixelStorei(i.UNPACK_FLIP_Y_WEBGL,!1),i.pixelStorei(i.UNPACK_PREMULTIPLY_ALPHA_WEBGL,!1),i.pixelStorei(i.UNPACK_COLORSPACE_CONVERSION_WEBGL,i.BROWSER_DEFAULT_WEBGL),i.pixelStorei(i.PACK_ROW_LENGTH,0),i.pixelStorei(i.PACK_SKIP_PIXELS,0),i.pixelStorei(i.PACK_SKIP_ROWS,0),i.pixelStorei(i.UNPACK_ROW_LENGTH,0),i.pixelStorei(i.UNPACK_IMAGE_HEIGHT,0),i.pixelStorei(i.UNPACK_SKIP_PIXELS,0),i.pixelStorei(i.UNPACK_SKIP_ROWS,0),i.pixelStorei(i.UNPACK_SKIP_IMAGES,0),f={},u={},j=null,it={},h={},l={},p=new WeakMap,x=[],w=null,m=!1,d=null,v=null,C=null,M=null,P=null,T=null,_=null,E=new ae(0,0,0),B=0,N=!1,D=null,k=null,G=null,L=null,H=null,Q.set(0,0,i.canvas.width,i.canvas.height),pt.set(0,0,i.canvas.width,i.canvas.height),r.reset(),o.reset(),a.reset()}return{buffers:{color:r,depth:o,stencil:a},enable:St,disable:Gt,bindFramebuffer:ne,drawBuffers:zt,useProgram:ce,setBlending:He,setMaterial:Ue,setFlipSided:tn,setCullFace:Pe,setLineWidth:_n,setPolygonOffset:_e,setScissorTest:cn,activeTexture:Ye,bindTexture:en,unbindTexture:F,compressedTexImage2D:Rt,compressedTexImage3D:Xt,texImage2D:y,texImage3D:X,pixelStorei:rt,getParameter:ct,updateUBOMapping:tt,uniformBlockBinding:nt,texStorage2D:Wt,texStorage3D:A,texSubImage2D:ie,texSubImage3D:Mt,compressedTexSubImage2D:Le,compressedTexSubImage3D:kt,scissor:gt,viewport:xt,reset:dt}}function OM(i,t,e,n,s,r,o){let a=t.has("WEBGL_multisampled_render_to_texture")?t.get("WEBGL_multisampled_render_to_texture"):null,l=typeof navigator>"u"?!1:/OculusBrowser/g.test(navigator.userAgent),c=new Jt,f=new WeakMap,u=new Set,h,p=new WeakMap,x=new Set,w=new FinalizationRegistry(A=>x.delete(A)),m=!1;try{m=typeof OffscreenCanvas<"u"&&new OffscreenCanvas(1,1).getContext("2d")!==null}catch{}function d(A,y){return m?new OffscreenCanvas(A,y):Oo("canvas")}function v(A,y,X){let ct=1,rt=Wt(A);if((rt.width>X||rt.height>X)&&(ct=X/Math.max(rt.width,rt.height)),ct<1)if(typeof HTMLImageElement<"u"&&A instanceof HTMLImageElement||typeof HTMLCanvasElement<"u"&&A instanceof HTMLCanvasElement||typeof ImageBitmap<"u"&&A instanceof ImageBitmap||typeof VideoFrame<"u"&&A instanceof VideoFrame){let gt=Math.floor(ct*rt.width),xt=Math.floor(ct*rt.height);h===void 0&&(h=d(gt,xt));let tt=y?d(gt,xt):h;return tt.width=gt,tt.height=xt,tt.getContext("2d").drawImage(A,0,0,gt,xt),qt("WebGLRenderer: Texture has been resized from ("+rt.width+"x"+rt.height+") to ("+gt+"x"+xt+")."),tt}else return"data"in A&&qt("WebGLRenderer: Image in DataTexture is too big ("+rt.width+"x"+rt.height+")."),A;return A}function C(A){return A.generateMipmaps}function M(A){i.generateMipmap(A)}function P(A){return A.isWebGLCubeRenderTarget?i.TEXTURE_CUBE_MAP:A.isWebGL3DRenderTarget?i.TEXTURE_3D:A.isWebGLArrayRenderTarget||A.isCompressedArrayTexture?i.TEXTURE_2D_ARRAY:i.TEXTURE_2D}function T(A,y,X,ct,rt,gt=!1){if(A!==null){if(i[A]!==void 0)return i[A];qt("WebGLRenderer: Attempt to use non-existing WebGL internal format '"+A+"'")}let xt;ct&&(xt=t.get("EXT_texture_norm16"),xt||qt("WebGLRenderer: Unable to use normalized textures without EXT_texture_norm16 extension"));let tt=y;if(y===i.RED&&(X===i.FLOAT&&(tt=i.R32F),X===i.HALF_FLOAT&&(tt=i.R16F),X===i.UNSIGNED_BYTE&&(tt=i.R8),X===i.UNSIGNED_SHORT&&xt&&(tt=xt.R16_EXT),X===i.SHORT&&xt&&(tt=xt.R16_SNORM_EXT)),y===i.RED_INTEGER&&(X===i.UNSIGNED_BYTE&&(tt=i.R8UI),X===i.UNSIGNED_SHORT&&(tt=i.R16UI),X===i.UNSIGNED_INT&&(tt=i.R32UI),X===i.BYTE&&(tt=i.R8I),X===i.SHORT&&(tt=i.R16I),X===i.INT&&(tt=i.R32I)),y===i.RG&&(X===i.FLOAT&&(tt=i.RG32F),X===i.HALF_FLOAT&&(tt=i.RG16F),X===i.UNSIGNED_BYTE&&(tt=i.RG8),X===i.UNSIGNED_SHORT&&xt&&(tt=xt.RG16_EXT),X===i.SHORT&&xt&&(tt=xt.RG16_SNORM_EXT)),y===i.RG_INTEGER&&(X===i.UNSIGNED_BYTE&&(tt=i.RG8UI),X===i.UNSIGNED_SHORT&&(tt=i.RG16UI),X===i.UNSIGNED_INT&&(tt=i.RG32UI),X===i.BYTE&&(tt=i.RG8I),X===i.SHORT&&(tt=i.RG16I),X===i.INT&&(tt=i.RG32I)),y===i.RGB_INTEGER&&(X===i.UNSIGNED_BYTE&&(tt=i.RGB8UI),X===i.UNSIGNED_SHORT&&(tt=i.RGB16UI),X===i.UNSIGNED_INT&&(tt=i.RGB32UI),X===i.BYTE&&(tt=i.RGB8I),X===i.SHORT&&(tt=i.RGB16I),X===i.INT&&(tt=i.RGB32I)),y===i.RGBA_INTEGER&&(X===i.UNSIGNED_BYTE&&(tt=i.RGBA8UI),X===i.UNSIGNED_SHORT&&(tt=i.RGBA16UI),X===i.UNSIGNED_INT&&(tt=i.RGBA32UI),X===i.BYTE&&(tt=i.RGBA8I),X===i.SHORT&&(tt=i.RGBA16I),X===i.INT&&(tt=i.RGBA32I)),y===i.RGB&&(X===i.UNSIGNED_SHORT&&xt&&(tt=xt.RGB16_EXT),X===i.SHORT&&xt&&(tt=xt.RGB16_SNORM_EXT),X===i.UNSIGNED_INT_5_9_9_9_REV&&(tt=i.RGB9_E5),X===i.UNSIGNED_INT_10F_11F_11F_REV&&(tt=i.R11F_G11F_B10F)),y===i.RGBA){let nt=gt?Fo:ge.getTransfer(rt);X===i.FLOAT&&(tt=i.RGBA32F),X===i.HALF_FLOAT&&(tt=i.RGBA16F),X===i.UNSIGNED_BYTE&&(tt=nt===Te?i.SRGB8_ALPHA8:i.RGBA8),X===i.UNSIGNED_SHORT&&xt&&(tt=xt.RGBA16_EXT),X===i.SHORT&&xt&&(tt=xt.RGBA16_SNORM_EXT),X===i.UNSIGNED_SHORT_4_4_4_4&&(tt=i.RGBA4),X===i.UNSIGNED_SHORT_5_5_5_1&&(tt=i.RGB5_A1)}return(tt===i.R16F||tt===i.R32F||tt===i.RG16F||tt===i.RG32F||tt===i.RGBA16F||tt===i.RGBA32F)&&t.get("EXT_color_buffer_float"),tt}function _(A,y){let X;return A?y===null||y===Ai||y===tr?X=i.DEPTH24_STENCIL8:y===gi?X=i.DEPTH32F_STENCIL8:y===no&&(X=i.DEPTH24_STENCIL8,qt("DepthTexture: 16 bit depth attachment is not supported with stencil. Using 24-bit attachment.")):y===null||y===Ai||y===tr?X=i.DEPTH_COMPONENT24:y===gi?X=i.DEPTH_COMPONENT32F:y===no&&(X=i.DEPTH_COMPONENT16),X}function E(A,y){return C(A)===!0||A.isFramebufferTexture&&A.minFilter!==wn&&A.minFilter!==zn?Math.log2(Math.max(y.width,y.height))+1:A.mipmaps.length>0?A.mipmaps.length:A.isCompressedTexture&&Array.isArray(A.image)?y.mipmaps.length:1}function B(A){let y=new WeakRef(A);n.get(A).__ref=y,x.add(y),w.register(A,y,y)}function N(A){let y=n.get(A).__ref;y!==void 0&&(x.delete(y),w.unregister(y))}function D(A){G(A.target)}function k(A){L(A.target)}function G(A){A.removeEventListener("dispose",D),N(A),Y(A),A.isVideoTexture&&f.delete(A),A.isHTMLTexture&&u.delete(A)}function L(A){A.removeEventListener("dispose",k),N(A),lt(A)}function H(){for(let A of x){let y=A.deref();y!==void 0&&(y.isRenderTarget===!0?L(y):G(y))}x.clear(),u.clear()}function Y(A){let y=n.get(A);if(y.__webglInit===void 0)return;let X=A.source,ct=p.get(X);if(ct){let rt=ct[y.__cacheKey];rt.usedTimes--,rt.usedTimes===0&&V(A),Object.keys(ct).length===0&&p.delete(X)}n.remove(A)}function V(A){let y=n.get(A);i.deleteTexture(y.__webglTexture);let X=A.source,ct=p.get(X);delete ct[y.__cacheKey],o.memory.textures--}function lt(A){let y=n.get(A);y.__depthDisposeCallback&&y.__depthDisposeCallback();let X=A.depthTexture;if(X&&X.renderTarget===A&&G(X),A.isWebGLCubeRenderTarget)for(let rt=0;rt<6;rt++){if(Array.isArray(y.__webglFramebuffer[rt]))for(let gt=0;gt<y.__webglFramebuffer[rt].length;gt++)i.deleteFramebuffer(y.__webglFramebuffer[rt][gt]);else i.deleteFramebuffer(y.__webglFramebuffer[rt]);y.__webglDepthbuffer&&i.deleteRenderbuffer(y.__webglDepthbuffer[rt])}else{if(Array.isArray(y.__webglFramebuffer))for(let rt=0;rt<y.__webglFramebuffer.length;rt++)i.deleteFramebuffer(y.__webglFramebuffer[rt]);else i.deleteFramebuffer(y.__webglFramebuffer);if(y.__webglDepthbuffer&&i.deleteRenderbuffer(y.__webglDepthbuffer),y.__webglMultisampledFramebuffer&&i.deleteFramebuffer(y.__webglMultisampledFramebuffer),y.__webglColorRenderbuffer)for(let rt=0;rt<y.__webglColorRenderbuffer.length;rt++)y.__webglColorRenderbuffer[rt]&&i.deleteRenderbuffer(y.__webglColorRenderbuffer[rt]);y.__webglDepthRenderbuffer&&i.deleteRenderbuffer(y.__webglDepthRenderbuffer)}let ct=A.textures;for(let rt=0,gt=ct.length;rt<gt;rt++){let xt=n.get(ct[rt]);xt.__webglTexture&&(i.deleteTexture(xt.__webglTexture),o.memory.textures--),n.remove(ct[rt])}n.remove(A)}let J=0;function j(){J=0}function it(){return J}function ut(A){J=A}function ht(){let A=J;return A>=s.maxTextures&&qt("WebGLTextures: Trying to use "+(A+1)+" texture units while this GPU supports only "+s.maxTextures),J+=1,A}function Q(A){let y=[];return y.push(A.wrapS),y.push(A.wrapT),y.push(A.wrapR||0),y.push(A.magFilter),y.push(A.minFilter),y.push(A.anisotropy),y.push(A.internalFormat),y.push(A.format),y.push(A.type),y.push(A.generateMipmaps),y.push(A.mipmapsAutoUpdate),y.push(A.premultiplyAlpha),y.push(A.flipY),y.push(A.unpackAlignment),y.push(A.colorSpace),y.join()}function pt(A,y){let X=n.get(A);if(A.isVideoTexture&&Le(A),A.isRenderTargetTexture===!1&&A.isExternalTexture!==!0&&A.version>0&&X.__version!==A.version){let ct=A.image;if(ct===null)qt("WebGLRenderer: Texture marked for update but no image data found.");else if(ct.complete===!1)qt("WebGLRenderer: Texture marked for update but image is incomplete");else{Ue(X,A,y);return}}else A.isExternalTexture&&(X.__webglTexture=A.sourceTexture?A.sourceTexture:null);e.bindTexture(i.TEXTURE_2D,X.__webglTexture,i.TEXTURE0+y)}function _t(A,y){let X=n.get(A);if(A.isRenderTargetTexture===!1&&A.version>0&&X.__version!==A.version){Ue(X,A,y);return}else A.isExternalTexture&&(X.__webglTexture=A.sourceTexture?A.sourceTexture:null);e.bindTexture(i.TEXTURE_2D_ARRAY,X.__webglTexture,i.TEXTURE0+y)}function Tt(A,y){let X=n.get(A);if(A.isRenderTargetTexture===!1&&A.version>0&&X.__version!==A.version){Ue(X,A,y);return}e.bindTexture(i.TEXTURE_3D,X.__webglTexture,i.TEXTURE0+y)}function St(A,y){let X=n.get(A);if(A.version>0&&X.__version!==A.version){tn(X,A,y);return}e.bindTexture(i.TEXTURE_CUBE_MAP,X.__webglTexture,i.TEXTURE0+y)}let Gt={[fl]:i.REPEAT,[ki]:i.CLAMP_TO_EDGE,[dl]:i.MIRRORED_REPEAT},ne={[wn]:i.NEAREST,[Fp]:i.NEAREST_MIPMAP_NEAREST,[ea]:i.NEAREST_MIPMAP_LINEAR,[zn]:i.LINEAR,[Ol]:i.LINEAR_MIPMAP_NEAREST,[rs]:i.LINEAR_MIPMAP_LINEAR},zt={[zp]:i.NEVER,[vu]:i.ALWAYS,[Vp]:i.LESS,[xu]:i.LEQUAL,[Gp]:i.EQUAL,[yu]:i.GEQUAL,[Hp]:i.GREATER,[Wp]:i.NOTEQUAL};function ce(A,y){if(y.type===gi&&t.has("OES_texture_float_linear")===!1&&(y.magFilter===zn||y.magFilter===Ol||y.magFilter===ea||y.magFilter===rs||y.minFilter===zn||y.minFilter===Ol||y.minFilter===ea||y.minFilter===rs)&&qt("WebGLRenderer: Unable to use linear filtering with floating point textures. OES_texture_float_linear not supported on this device."),i.texParameteri(A,i.TEXTURE_WRAP_S,Gt[y.wrapS]),i.texParameteri(A,i.TEXTURE_WRAP_T,Gt[y.wrapT]),(A===i.TEXTURE_3D||A===i.TEXTURE_2D_ARRAY)&&i.texParameteri(A,i.TEXTURE_WRAP_R,Gt[y.wrapR]),i.texParameteri(A,i.TEXTURE_MAG_FILTER,ne[y.magFilter]),i.texParameteri(A,i.TEXTURE_MIN_FILTER,ne[y.minFilter]),y.compareFunction&&(i.texParameteri(A,i.TEXTURE_COMPARE_MODE,i.COMPARE_REF_TO_TEXTURE),i.texParameteri(A,i.TEXTURE_COMPARE_FUNC,zt[y.compareFunction])),t.has("EXT_texture_filter_anisotropic")===!0){if(y.magFilter===wn||y.minFilter!==ea&&y.minFilter!==rs||y.type===gi&&t.has("OES_texture_float_linear")===!1)return;if(y.anisotropy>1||n.get(y).__currentAnisotropy){let X=t.get("EXT_texture_filter_anisotropic");i.texParameterf(A,X.TEXTURE_MAX_ANISOTROPY_EXT,Math.min(y.anisotropy,s.getMaxAnisotropy())),n.get(y).__currentAnisotropy=y.anisotropy}}}function re(A,y){let X=!1;A.__webglInit===void 0&&(A.__webglInit=!0,y.addEventListener("dispose",D),B(y));let ct=y.source,rt=p.get(ct);rt===void 0&&(rt={},p.set(ct,rt));let gt=Q(y);if(gt!==A.__cacheKey){rt[gt]===void 0&&(rt[gt]={texture:i.createTexture(),usedTimes:0},o.memory.textures++,X=!0),rt[gt].usedTimes++;let xt=rt[A.__cacheKey];xt!==void 0&&(rt[A.__cacheKey].usedTimes--,xt.usedTimes===0&&V(y)),A.__cacheKey=gt,A.__webglTexture=rt[gt].texture}return X}function te(A,y,X){return Math.floor(Math.floor(A/X)/y)}function He(A,y,X,ct){let gt=A.updateRanges;if(gt.length===0)e.texSubImage2D(i.TEXTURE_2D,0,0,0,y.width,y.height,X,ct,y.data);else{gt.sort((U,st)=>U.start-st.start);let xt=0;for(let U=1;U<gt.length;U++){let st=gt[xt],et=gt[U],bt=st.start+st.count,mt=te(et.start,y.width,4),vt=te(st.start,y.width,4);et.start<=bt+1&&mt===vt&&te(et.start+et.count-1,y.width,4)===mt?st.count=Math.max(st.count,et.start+et.count-st.start):(++xt,gt[xt]=et)}gt.length=xt+1;let tt=e.getParameter(i.UNPACK_ROW_LENGTH),nt=e.getParameter(i.UNPACK_SKIP_PIXELS),dt=e.getParameter(i.UNPACK_SKIP_ROWS);e.pixelStorei(i.UNPACK_ROW_LENGTH,y.width);for(let U=0,st=gt.length;U<st;U++){let et=gt[U],bt=Math.floor(et.start/4),mt=Math.ceil(et.count/4),vt=bt%y.width,Vt=Math.floor(bt/y.width),Zt=mt,at=1;e.pixelStorei(i.UNPACK_SKIP_PIXELS,vt),e.pixelStorei(i.UNPACK_SKIP_ROWS,Vt),e.texSubImage2D(i.TEXTURE_2D,0,vt,Vt,Zt,at,X,ct,y.data)}A.clearUpdateRanges(),e.pixelStorei(i.UNPACK_ROW_LENGTH,tt),e.pixelStorei(i.UNPACK_SKIP_PIXELS,nt),e.pixelStorei(i.UNPACK_SKIP_ROWS,dt)}}function Ue(A,y,X){let ct=i.TEXTURE_2D;(y.isDataArrayTexture||y.isCompressedArrayTexture)&&(ct=i.TEXTURE_2D_ARRAY),y.isData3DTexture&&(ct=i.TEXTURE_3D);let rt=re(A,y),gt=y.source;e.bindTexture(ct,A.__webglTexture,i.TEXTURE0+X);let xt=n.get(gt);if(gt.version!==xt.__version||rt===!0){if(e.activeTexture(i.TEXTURE0+X),(typeof ImageBitmap<"u"&&y.image instanceof ImageBitmap)===!1){let at=ge.getPrimaries(ge.workingColorSpace),Ft=y.colorSpace===as?null:ge.getPrimaries(y.colorSpace),$t=y.colorSpace===as||at===Ft?i.NONE:i.BROWSER_DEFAULT_WEBGL;e.pixelStorei(i.UNPACK_FLIP_Y_WEBGL,y.flipY),e.pixelStorei(i.UNPACK_PREMULTIPLY_ALPHA_WEBGL,y.premultiplyAlpha),e.pixelStorei(i.UNPACK_COLORSPACE_CONVERSION_WEBGL,$t)}e.pixelStorei(i.UNPACK_ALIGNMENT,y.unpackAlignment);let nt=v(y.image,!1,s.maxTextureSize);nt=kt(y,nt);let dt=r.convert(y.format,y.colorSpace),U=r.convert(y.type),st=T(y.internalFormat,dt,U,y.normalized,y.colorSpace,y.isVideoTexture);ce(ct,y);let et,bt=y.mipmaps,mt=y.isVideoTexture!==!0,vt=xt.__version===void 0||rt===!0,Vt=gt.dataReady,Zt=E(y,nt);if(y.isDepthTexture)st=_(y.format===os,y.type),vt&&(mt?e.texStorage2D(i.TEXTURE_2D,1,st,nt.width,nt.height):e.texImage2D(i.TEXTURE_2D,0,st,nt.width,nt.height,0,dt,U,null));else if(y.isDataTexture)if(bt.length>0){mt&&vt&&e.texStorage2D(i.TEXTURE_2D,Zt,st,bt[0].width,bt[0].height);for(let at=0,Ft=bt.length;at<Ft;at++)et=bt[at],mt?Vt&&e.texSubImage2D(i.TEXTURE_2D,at,0,0,et.width,et.height,dt,U,et.data):e.texImage2D(i.TEXTURE_2D,at,st,et.width,et.height,0,dt,U,et.data);y.generateMipmaps=!1}else mt?(vt&&e.texStorage2D(i.TEXTURE_2D,Zt,st,nt.width,nt.height),Vt&&He(y,nt,dt,U)):e.texImage2D(i.TEXTURE_2D,0,st,nt.width,nt.height,0,dt,U,nt.data);else if(y.isCompressedTexture)if(y.isCompressedArrayTexture){mt&&vt&&e.texStorage3D(i.TEXTURE_2D_ARRAY,Zt,st,bt[0].width,bt[0].height,nt.depth);for(let at=0,Ft=bt.length;at<Ft;at++)if(et=bt[at],y.format!==Ci)if(dt!==null)if(mt){if(Vt)if(y.layerUpdates.size>0){let $t=Pu(et.width,et.height,y.format,y.type);for(let At of y.layerUpdates){let se=et.data.subarray(At*$t/et.data.BYTES_PER_ELEMENT,(At+1)*$t/et.data.BYTES_PER_ELEMENT);e.compressedTexSubImage3D(i.TEXTURE_2D_ARRAY,at,0,0,At,et.width,et.height,1,dt,se)}}else e.compressedTexSubImage3D(i.TEXTURE_2D_ARRAY,at,0,0,0,et.width,et.height,nt.depth,dt,et.data)}else e.compressedTexImage3D(i.TEXTURE_2D_ARRAY,at,st,et.width,et.height,nt.depth,0,et.data,0,0);else qt("WebGLRenderer: Attempt to load unsupported compressed texture format in .uploadTexture()");else mt?Vt&&e.texSubImage3D(i.TEXTURE_2D_ARRAY,at,0,0,0,et.width,et.height,nt.depth,dt,U,et.data):e.texImage3D(i.TEXTURE_2D_ARRAY,at,st,et.width,et.height,nt.depth,0,dt,U,et.data);y.layerUpdates.size>0&&y.clearLayerUpdates()}else{mt&&vt&&e.texStorage2D(i.TEXTURE_2D,Zt,st,bt[0].width,bt[0].height);for(let at=0,Ft=bt.length;at<Ft;at++)et=bt[at],y.format!==Ci?dt!==null?mt?Vt&&e.compressedTexSubImage2D(i.TEXTURE_2D,at,0,0,et.width,et.height,dt,et.data):e.compressedTexImage2D(i.TEXTURE_2D,at,st,et.width,et.height,0,et.data):qt("WebGLRenderer: Attempt to load unsupported compressed texture format in .uploadTexture()"):mt?Vt&&e.texSubImage2D(i.TEXTURE_2D,at,0,0,et.width,et.height,dt,U,et.data):e.texImage2D(i.TEXTURE_2D,at,st,et.width,et.height,0,dt,U,et.data)}else if(y.isDataArrayTexture)if(mt){if(vt&&e.texStorage3D(i.TEXTURE_2D_ARRAY,Zt,st,nt.width,nt.height,nt.depth),Vt)if(y.layerUpdates.size>0){let at=Pu(nt.width,nt.height,y.format,y.type);for(let Ft of y.layerUpdates){let $t=nt.data.subarray(Ft*at/nt.data.BYTES_PER_ELEMENT,(Ft+1)*at/nt.data.BYTES_PER_ELEMENT);e.texSubImage3D(i.TEXTURE_2D_ARRAY,0,0,0,Ft,nt.width,nt.height,1,dt,U,$t)}y.clearLayerUpdates()}else e.texSubImage3D(i.TEXTURE_2D_ARRAY,0,0,0,0,nt.width,nt.height,nt.depth,dt,U,nt.data)}else e.texImage3D(i.TEXTURE_2D_ARRAY,0,st,nt.width,nt.height,nt.depth,0,dt,U,nt.data);else if(y.isData3DTexture)mt?(vt&&e.texStorage3D(i.TEXTURE_3D,Zt,st,nt.width,nt.height,nt.depth),Vt&&e.texSubImage3D(i.TEXTURE_3D,0,0,0,0,nt.width,nt.height,nt.depth,dt,U,nt.data)):e.texImage3D(i.TEXTURE_3D,0,st,nt.width,nt.height,nt.depth,0,dt,U,nt.data);else if(y.isFramebufferTexture){if(vt)if(mt)e.texStorage2D(i.TEXTURE_2D,Zt,st,nt.width,nt.height);else{let at=nt.width,Ft=nt.height;for(let $t=0;$t<Zt;$t++)e.texImage2D(i.TEXTURE_2D,$t,st,at,Ft,0,dt,U,null),at>>=1,Ft>>=1}}else if(y.isHTMLTexture){if("texElementImage2D"in i){let at=i.canvas;if(at.hasAttribute("layoutsubtree")||at.setAttribute("layoutsubtree","true"),nt.parentNode!==at){at.appendChild(nt),u.add(y),at.onpaint=Ft=>{let $t=Ft.changedElements;for(let At of u)$t.includes(At.image)&&(At.needsUpdate=!0)},at.requestPaint();return}if(i.texElementImage2D.length===3)i.texElementImage2D(i.TEXTURE_2D,i.RGBA8,nt);else{let $t=i.RGBA,At=i.RGBA,se=i.UNSIGNED_BYTE;i.texElementImage2D(i.TEXTURE_2D,0,$t,At,se,nt)}i.texParameteri(i.TEXTURE_2D,i.TEXTURE_MIN_FILTER,i.LINEAR),i.texParameteri(i.TEXTURE_2D,i.TEXTURE_WRAP_S,i.CLAMP_TO_EDGE),i.texParameteri(i.TEXTURE_2D,i.TEXTURE_WRAP_T,i.CLAMP_TO_EDGE)}}else if(bt.length>0){if(mt&&vt){let at=Wt(bt[0]);e.texStorage2D(i.TEXTURE_2D,Zt,st,at.width,at.height)}for(let at=0,Ft=bt.length;at<Ft;at++)et=bt[at],mt?Vt&&e.texSubImage2D(i.TEXTURE_2D,at,0,0,dt,U,et):e.texImage2D(i.TEXTURE_2D,at,st,dt,U,et);y.generateMipmaps=!1}else if(mt){if(vt){let at=Wt(nt);e.texStorage2D(i.TEXTURE_2D,Zt,st,at.width,at.height)}Vt&&e.texSubImage2D(i.TEXTURE_2D,0,0,0,dt,U,nt)}else e.texImage2D(i.TEXTURE_2D,0,st,dt,U,nt);C(y)&&y.mipmapsAutoUpdate===!0&&M(ct),xt.__version=gt.version,y.onUpdate&&y.onUpdate(y)}A.__version=y.version}function tn(A,y,X){if(y.image.length!==6)return;let ct=re(A,y),rt=y.source;e.bindTexture(i.TEXTURE_CUBE_MAP,A.__webglTexture,i.TEXTURE0+X);let gt=n.get(rt);if(rt.version!==gt.__version||ct===!0){e.activeTexture(i.TEXTURE0+X);let xt=ge.getPrimaries(ge.workingColorSpace),tt=y.colorSpace===as?null:ge.getPrimaries(y.colorSpace),nt=y.colorSpace===as||xt===tt?i.NONE:i.BROWSER_DEFAULT_WEBGL;e.pixelStorei(i.UNPACK_FLIP_Y_WEBGL,y.flipY),e.pixelStorei(i.UNPACK_PREMULTIPLY_ALPHA_WEBGL,y.premultiplyAlpha),e.pixelStorei(i.UNPACK_ALIGNMENT,y.unpackAlignment),e.pixelStorei(i.UNPACK_COLORSPACE_CONVERSION_WEBGL,nt);let dt=y.isCompressedTexture||y.image[0].isCompressedTexture,U=y.image[0]&&y.image[0].isDataTexture,st=[];for(let At=0;At<6;At++)!dt&&!U?st[At]=v(y.image[At],!0,s.maxCubemapSize):st[At]=U?y.image[At].image:y.image[At],st[At]=kt(y,st[At]);let et=st[0],bt=r.convert(y.format,y.colorSpace),mt=r.convert(y.type),vt=T(y.internalFormat,bt,mt,y.normalized,y.colorSpace),Vt=y.isVideoTexture!==!0,Zt=gt.__version===void 0||ct===!0,at=rt.dataReady,Ft=E(y,et);ce(i.TEXTURE_CUBE_MAP,y);let $t;if(y.isDepthTexture){if(vt=_(y.format===os,y.type),Zt)if(Vt)e.texStorage2D(i.TEXTURE_CUBE_MAP,1,vt,et.width,et.height);else for(let At=0;At<6;At++)e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,0,vt,et.width,et.height,0,bt,mt,null)}else if(dt){Vt&&Zt&&e.texStorage2D(i.TEXTURE_CUBE_MAP,Ft,vt,et.width,et.height);for(let At=0;At<6;At++){$t=st[At].mipmaps;for(let se=0;se<$t.length;se++){let Oe=$t[se];y.format!==Ci?bt!==null?Vt?at&&e.compressedTexSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se,0,0,Oe.width,Oe.height,bt,Oe.data):e.compressedTexImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se,vt,Oe.width,Oe.height,0,Oe.data):qt("WebGLRenderer: Attempt to load unsupported compressed texture format in .setTextureCube()"):Vt?at&&e.texSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se,0,0,Oe.width,Oe.height,bt,mt,Oe.data):e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se,vt,Oe.width,Oe.height,0,bt,mt,Oe.data)}}}else{if($t=y.mipmaps,Vt&&Zt){$t.length>0&&Ft++;let At=Wt(st[0]);e.texStorage2D(i.TEXTURE_CUBE_MAP,Ft,vt,At.width,At.height)}for(let At=0;At<6;At++)if(U){Vt?at&&e.texSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,0,0,0,st[At].width,st[At].height,bt,mt,st[At].data):e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,0,vt,st[At].width,st[At].height,0,bt,mt,st[At].data);for(let se=0;se<$t.length;se++){let Dn=$t[se].image[At].image;Vt?at&&e.texSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se+1,0,0,Dn.width,Dn.height,bt,mt,Dn.data):e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se+1,vt,Dn.width,Dn.height,0,bt,mt,Dn.data)}}else{Vt?at&&e.texSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,0,0,0,bt,mt,st[At]):e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,0,vt,bt,mt,st[At]);for(let se=0;se<$t.length;se++){let Oe=$t[se];Vt?at&&e.texSubImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se+1,0,0,bt,mt,Oe.image[At]):e.texImage2D(i.TEXTURE_CUBE_MAP_POSITIVE_X+At,se+1,vt,bt,mt,Oe.image[At])}}}C(y)&&y.mipmapsAutoUpdate===!0&&M(i.TEXTURE_CUBE_MAP),gt.__version=rt.version,y.onUpdate&&y.onUpdate(y)}A.__version=y.version}function Pe(A,y,X,ct,rt,gt){let xt=r.convert(X.format,X.colorSpace),tt=r.convert(X.type),nt=T(X.internalFormat,xt,tt,X.normalized,X.colorSpace),dt=n.get(y),U=n.get(X);if(U.__renderTarget=y,!dt.__hasExternalTextures){let st=Math.max(1,y.width>>gt),et=Math.max(1,y.height>>gt);rt===i.TEXTURE_3D||rt===i.TEXTURE_2D_ARRAY?e.texImage3D(rt,gt,nt,st,et,y.depth,0,xt,tt,null):e.texImage2D(rt,gt,nt,st,et,0,xt,tt,null)}e.bindFramebuffer(i.FRAMEBUFFER,A),Mt(y)?a.framebufferTexture2DMultisampleEXT(i.FRAMEBUFFER,ct,rt,U.__webglTexture,0,ie(y)):(rt===i.TEXTURE_2D||rt>=i.TEXTURE_CUBE_MAP_POSITIVE_X&&rt<=i.TEXTURE_CUBE_MAP_NEGATIVE_Z)&&i.framebufferTexture2D(i.FRAMEBUFFER,ct,rt,U.__webglTexture,gt),e.bindFramebuffer(i.FRAMEBUFFER,null)}function _n(A,y,X){if(i.bindRenderbuffer(i.RENDERBUFFER,A),y.depthBuffer){let ct=y.depthTexture,rt=ct&&ct.isDepthTexture?ct.type:null,gt=_(y.stencilBuffer,rt),xt=y.stencilBuffer?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT;Mt(y)?a.renderbufferStorageMultisampleEXT(i.RENDERBUFFER,ie(y),gt,y.width,y.height):X?i.renderbufferStorageMultisample(i.RENDERBUFFER,ie(y),gt,y.width,y.height):i.renderbufferStorage(i.RENDERBUFFER,gt,y.width,y.height),i.framebufferRenderbuffer(i.FRAMEBUFFER,xt,i.RENDERBUFFER,A)}else{let ct=y.textures;for(let rt=0;rt<ct.length;rt++){let gt=ct[rt],xt=r.convert(gt.format,gt.colorSpace),tt=r.convert(gt.type),nt=T(gt.internalFormat,xt,tt,gt.normalized,gt.colorSpace);Mt(y)?a.renderbufferStorageMultisampleEXT(i.RENDERBUFFER,ie(y),nt,y.width,y.height):X?i.renderbufferStorageMultisample(i.RENDERBUFFER,ie(y),nt,y.width,y.height):i.renderbufferStorage(i.RENDERBUFFER,nt,y.width,y.height)}}i.bindRenderbuffer(i.RENDERBUFFER,null)}function _e(A,y,X){let ct=y.isWebGLCubeRenderTarget===!0;if(e.bindFramebuffer(i.FRAMEBUFFER,A),!(y.depthTexture&&y.depthTexture.isDepthTexture))throw new Error("THREE.WebGLTextures: renderTarget.depthTexture must be an instance of THREE.DepthTexture.");let rt=n.get(y.depthTexture);rt.__renderTarget=y;let gt=ct?y.depthTexture.image[0]:y.depthTexture.image;(!rt.__webglTexture||gt.width!==y.width||gt.height!==y.height)&&(gt.width=y.width,gt.height=y.height,y.depthTexture.needsUpdate=!0),ct?St(y.depthTexture,0):pt(y.depthTexture,0);let xt=rt.__webglTexture,tt=ie(y),nt=ct?i.TEXTURE_CUBE_MAP_POSITIVE_X+X:i.TEXTURE_2D,dt=y.depthTexture.format===os?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT;if(y.depthTexture.format===ns)Mt(y)?a.framebufferTexture2DMultisampleEXT(i.FRAMEBUFFER,dt,nt,xt,0,tt):i.framebufferTexture2D(i.FRAMEBUFFER,dt,nt,xt,0);else if(y.depthTexture.format===os)Mt(y)?a.framebufferTexture2DMultisampleEXT(i.FRAMEBUFFER,dt,nt,xt,0,tt):i.framebufferTexture2D(i.FRAMEBUFFER,dt,nt,xt,0);else throw new Error("THREE.WebGLTextures: Unknown depthTexture format.")}function cn(A){let y=n.get(A),X=A.isWebGLCubeRenderTarget===!0;if(y.__boundDepthTexture!==A.depthTexture){let ct=A.depthTexture;if(y.__depthDisposeCallback&&y.__depthDisposeCallback(),ct){let rt=()=>{delete y.__boundDepthTexture,delete y.__depthDisposeCallback,ct.removeEventListener("dispose",rt)};ct.addEventListener("dispose",rt),y.__depthDisposeCallback=rt}y.__boundDepthTexture=ct}if(A.depthTexture&&!y.__autoAllocateDepthBuffer)if(X)for(let ct=0;ct<6;ct++)_e(y.__webglFramebuffer[ct],A,ct);else A.texture.mipmaps.length>0?_e(y.__webglFramebuffer[0],A,0):_e(y.__webglFramebuffer,A,0);else if(X){y.__webglDepthbuffer=[];for(let ct=0;ct<6;ct++)if(e.bindFramebuffer(i.FRAMEBUFFER,y.__webglFramebuffer[ct]),y.__webglDepthbuffer[ct]===void 0)y.__webglDepthbuffer[ct]=i.createRenderbuffer(),_n(y.__webglDepthbuffer[ct],A,!1);else{let rt=A.stencilBuffer?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT,gt=y.__webglDepthbuffer[ct];i.bindRenderbuffer(i.RENDERBUFFER,gt),i.framebufferRenderbuffer(i.FRAMEBUFFER,rt,i.RENDERBUFFER,gt)}}else if(A.texture.mipmaps.length>0?e.bindFramebuffer(i.FRAMEBUFFER,y.__webglFramebuffer[0]):e.bindFramebuffer(i.FRAMEBUFFER,y.__webglFramebuffer),y.__webglDepthbuffer===void 0)y.__webglDepthbuffer=i.createRenderbuffer(),_n(y.__webglDepthbuffer,A,!1);else{let rt=A.stencilBuffer?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT,gt=y.__webglDepthbuffer;i.bindRenderbuffer(i.RENDERBUFFER,gt),i.framebufferRenderbuffer(i.FRAMEBUFFER,rt,i.RENDERBUFFER,gt)}e.bindFramebuffer(i.FRAMEBUFFER,null)}function Ye(A,y,X){let ct=n.get(A);y!==void 0&&Pe(ct.__webglFramebuffer,A,A.texture,i.COLOR_ATTACHMENT0,i.TEXTURE_2D,0),X!==void 0&&cn(A)}function en(A){let y=A.texture,X=n.get(A),ct=n.get(y);A.addEventListener("dispose",k),B(A);let rt=A.textures,gt=A.isWebGLCubeRenderTarget===!0,xt=rt.length>1;if(xt||(ct.__webglTexture===void 0&&(ct.__webglTexture=i.createTexture()),ct.__version=y.version,o.memory.textures++),gt){X.__webglFramebuffer=[];for(let tt=0;tt<6;tt++)if(y.mipmaps.length>0){X.__webglFramebuffer[tt]=[];for(let nt=0;nt<y.mipmaps.length;nt++)X.__webglFramebuffer[tt][nt]=i.createFramebuffer()}else X.__webglFramebuffer[tt]=i.createFramebuffer()}else{if(y.mipmaps.length>0){X.__webglFramebuffer=[];for(let tt=0;tt<y.mipmaps.length;tt++)X.__webglFramebuffer[tt]=i.createFramebuffer()}else X.__webglFramebuffer=i.createFramebuffer();if(xt)for(let tt=0,nt=rt.length;tt<nt;tt++){let dt=n.get(rt[tt]);dt.__webglTexture===void 0&&(dt.__webglTexture=i.createTexture(),o.memory.textures++)}if(A.samples>0&&Mt(A)===!1){X.__webglMultisampledFramebuffer=i.createFramebuffer(),X.__webglColorRenderbuffer=[],e.bindFramebuffer(i.FRAMEBUFFER,X.__webglMultisampledFramebuffer);for(let tt=0;tt<rt.length;tt++){let nt=rt[tt];X.__webglColorRenderbuffer[tt]=i.createRenderbuffer(),i.bindRenderbuffer(i.RENDERBUFFER,X.__webglColorRenderbuffer[tt]);let dt=r.convert(nt.format,nt.colorSpace),U=r.convert(nt.type),st=T(nt.internalFormat,dt,U,nt.normalized,nt.colorSpace,A.isXRRenderTarget===!0),et=ie(A);i.renderbufferStorageMultisample(i.RENDERBUFFER,et,st,A.width,A.height),i.framebufferRenderbuffer(i.FRAMEBUFFER,i.COLOR_ATTACHMENT0+tt,i.RENDERBUFFER,X.__webglColorRenderbuffer[tt])}i.bindRenderbuffer(i.RENDERBUFFER,null),A.depthBuffer&&(X.__webglDepthRenderbuffer=i.createRenderbuffer(),_n(X.__webglDepthRenderbuffer,A,!0)),e.bindFramebuffer(i.FRAMEBUFFER,null)}}if(gt){e.bindTexture(i.TEXTURE_CUBE_MAP,ct.__webglTexture),ce(i.TEXTURE_CUBE_MAP,y);for(let tt=0;tt<6;tt++)if(y.mipmaps.length>0)for(let nt=0;nt<y.mipmaps.length;nt++)Pe(X.__webglFramebuffer[tt][nt],A,y,i.COLOR_ATTACHMENT0,i.TEXTURE_CUBE_MAP_POSITIVE_X+tt,nt);else Pe(X.__webglFramebuffer[tt],A,y,i.COLOR_ATTACHMENT0,i.TEXTURE_CUBE_MAP_POSITIVE_X+tt,0);C(y)?M(i.TEXTURE_CUBE_MAP):y.mipmaps.length>0&&i.texParameteri(i.TEXTURE_CUBE_MAP,i.TEXTURE_MAX_LEVEL,y.mipmaps.length-1),e.unbindTexture()}else if(xt){for(let tt=0,nt=rt.length;tt<nt;tt++){let dt=rt[tt],U=n.get(dt),st=i.TEXTURE_2D;(A.isWebGL3DRenderTarget||A.isWebGLArrayRenderTarget)&&(st=A.isWebGL3DRenderTarget?i.TEXTURE_3D:i.TEXTURE_2D_ARRAY),e.bindTexture(st,U.__webglTexture),ce(st,dt),Pe(X.__webglFramebuffer,A,dt,i.COLOR_ATTACHMENT0+tt,st,0),C(dt)&&M(st)}e.unbindTexture()}else{let tt=i.TEXTURE_2D;if((A.isWebGL3DRenderTarget||A.isWebGLArrayRenderTarget)&&(tt=A.isWebGL3DRenderTarget?i.TEXTURE_3D:i.TEXTURE_2D_ARRAY),e.bindTexture(tt,ct.__webglTexture),ce(tt,y),y.mipmaps.length>0)for(let nt=0;nt<y.mipmaps.length;nt++)Pe(X.__webglFramebuffer[nt],A,y,i.COLOR_ATTACHMENT0,tt,nt);else Pe(X.__webglFramebuffer,A,y,i.COLOR_ATTACHMENT0,tt,0);C(y)?M(tt):y.mipmaps.length>0&&i.texParameteri(tt,i.TEXTURE_MAX_LEVEL,y.mipmaps.length-1),e.unbindTexture()}A.depthBuffer&&cn(A)}function F(A){let y=A.textures;for(let X=0,ct=y.length;X<ct;X++){let rt=y[X];if(C(rt)&&rt.mipmapsAutoUpdate===!0){let gt=P(A),xt=n.get(rt).__webglTexture;e.bindTexture(gt,xt),M(gt),e.unbindTexture()}}}let Rt=[];function Xt(A){if(A.samples>0){if(Mt(A)===!1){let y=A.textures,X=A.width,ct=A.height,rt=i.COLOR_BUFFER_BIT,gt=A.stencilBuffer?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT,xt=n.get(A),tt=y.length>1;if(tt)for(let dt=0;dt<y.length;dt++)e.bindFramebuffer(i.FRAMEBUFFER,xt.__webglMultisampledFramebuffer),i.framebufferRenderbuffer(i.FRAMEBUFFER,i.COLOR_ATTACHMENT0+dt,i.RENDERBUFFER,null),e.bindFramebuffer(i.FRAMEBUFFER,xt.__webglFramebuffer),i.framebufferTexture2D(i.DRAW_FRAMEBUFFER,i.COLOR_ATTACHMENT0+dt,i.TEXTURE_2D,null,0);e.bindFramebuffer(i.READ_FRAMEBUFFER,xt.__webglMultisampledFramebuffer),A.texture.mipmaps.length>0?e.bindFramebuffer(i.DRAW_FRAMEBUFFER,xt.__webglFramebuffer[0]):e.bindFramebuffer(i.DRAW_FRAMEBUFFER,xt.__webglFramebuffer);for(let dt=0;dt<y.length;dt++){if(A.resolveDepthBuffer&&(A.depthBuffer&&(rt|=i.DEPTH_BUFFER_BIT),A.stencilBuffer&&A.resolveStencilBuffer&&(rt|=i.STENCIL_BUFFER_BIT)),tt){i.framebufferRenderbuffer(i.READ_FRAMEBUFFER,i.COLOR_ATTACHMENT0,i.RENDERBUFFER,xt.__webglColorRenderbuffer[dt]);let U=n.get(y[dt]).__webglTexture;i.framebufferTexture2D(i.DRAW_FRAMEBUFFER,i.COLOR_ATTACHMENT0,i.TEXTURE_2D,U,0)}i.blitFramebuffer(0,0,X,ct,0,0,X,ct,rt,i.NEAREST),l===!0&&(Rt.length=0,Rt.push(i.COLOR_ATTACHMENT0+dt),A.depthBuffer&&A.storeMultisampledDepthBuffer===!1&&Rt.push(gt),i.invalidateFramebuffer(i.READ_FRAMEBUFFER,Rt))}if(e.bindFramebuffer(i.READ_FRAMEBUFFER,null),e.bindFramebuffer(i.DRAW_FRAMEBUFFER,null),tt)for(let dt=0;dt<y.length;dt++){e.bindFramebuffer(i.FRAMEBUFFER,xt.__webglMultisampledFramebuffer),i.framebufferRenderbuffer(i.FRAMEBUFFER,i.COLOR_ATTACHMENT0+dt,i.RENDERBUFFER,xt.__webglColorRenderbuffer[dt]);let U=n.get(y[dt]).__webglTexture;e.bindFramebuffer(i.FRAMEBUFFER,xt.__webglFramebuffer),i.framebufferTexture2D(i.DRAW_FRAMEBUFFER,i.COLOR_ATTACHMENT0+dt,i.TEXTURE_2D,U,0)}e.bindFramebuffer(i.DRAW_FRAMEBUFFER,xt.__webglMultisampledFramebuffer)}else if(A.depthBuffer&&A.storeMultisampledDepthBuffer===!1&&l){let y=A.stencilBuffer?i.DEPTH_STENCIL_ATTACHMENT:i.DEPTH_ATTACHMENT;i.invalidateFramebuffer(i.DRAW_FRAMEBUFFER,[y])}}}function ie(A){return Math.min(s.maxSamples,A.samples)}function Mt(A){let y=n.get(A);return A.samples>0&&t.has("WEBGL_multisampled_render_to_texture")===!0&&y.__useRenderToTexture!==!1}function Le(A){let y=o.render.frame;f.get(A)!==y&&(f.set(A,y),A.update())}function kt(A,y){let X=A.colorSpace,ct=A.format,rt=A.type;return A.isCompressedTexture===!0||A.isVideoTexture===!0||X!==Uo&&X!==as&&(ge.getTransfer(X)===Te?(ct!==Ci||rt!==Xn)&&qt("WebGLTextures: sRGB encoded textures have to use RGBAFormat and UnsignedByteType."):jt("WebGLTextures: Unsupported texture color space:",X)),y}function Wt(A){return typeof HTMLImageElement<"u"&&A instanceof HTMLImageElement?(c.width=A.naturalWidth||A.width,c.height=A.naturalHeight||A.height):typeof VideoFrame<"u"&&A instanceof VideoFrame?(c.width=A.displayWidth,c.height=A.displayHeight):(c.width=A.width,c.height=A.height),c}this.allocateTextureUnit=ht,this.resetTextureUnits=j,this.getTextureUnits=it,this.setTextureUnits=ut,this.setTexture2D=pt,this.setTexture2DArray=_t,this.setTexture3D=Tt,this.setTextureCube=St,this.rebindTextures=Ye,this.setupRenderTarget=en,this.updateRenderTargetMipmap=F,this.updateMultisampleRenderTarget=Xt,this.setupDepthRenderbuffer=cn,this.setupFrameBufferTexture=Pe,this.useMultisampledRTT=Mt,this.dispose=H}function BM(i,t){function e(n,s=as){let r,o=ge.getTransfer(s);if(n===Xn)return i.UNSIGNED_BYTE;if(n===kl)return i.UNSIGNED_SHORT_4_4_4_4;if(n===zl)return i.UNSIGNED_SHORT_5_5_5_1;if(n===pu)return i.UNSIGNED_INT_5_9_9_9_REV;if(n===mu)return i.UNSIGNED_INT_10F_11F_11F_REV;if(n===fu)return i.BYTE;if(n===du)return i.SHORT;if(n===no)return i.UNSIGNED_SHORT;if(n===Bl)return i.INT;if(n===Ai)return i.UNSIGNED_INT;if(n===gi)return i.FLOAT;if(n===Ri)return i.HALF_FLOAT;if(n===gu)return i.ALPHA;if(n===_u)return i.RGB;if(n===Ci)return i.RGBA;if(n===ns)return i.DEPTH_COMPONENT;if(n===os)return i.DEPTH_STENCIL;if(n===Vl)return i.RED;if(n===Gl)return i.RED_INTEGER;if(n===Ls)return i.RG;if(n===Hl)return i.RG_INTEGER;if(n===Wl)return i.RGBA_INTEGER;if(n===na||n===ia||n===sa||n===ra)if(o===Te)if(r=t.get("WEBGL_compressed_texture_s3tc_srgb"),r!==null){if(n===na)return r.COMPRESSED_SRGB_S3TC_DXT1_EXT;if(n===ia)return r.COMPRESSED_SRGB_ALPHA_S3TC_DXT1_EXT;if(n===sa)return r.COMPRESSED_SRGB_ALPHA_S3TC_DXT3_EXT;if(n===ra)return r.COMPRESSED_SRGB_ALPHA_S3TC_DXT5_EXT}else return null;else if(r=t.get("WEBGL_compressed_texture_s3tc"),r!==null){if(n===na)return r.COMPRESSED_RGB_S3TC_DXT1_EXT;if(n===ia)return r.COMPRESSED_RGBA_S3TC_DXT1_EXT;if(n===sa)return r.COMPRESSED_RGBA_S3TC_DXT3_EXT;if(n===ra)return r.COMPRESSED_RGBA_S3TC_DXT5_EXT}else return null;if(n===Xl||n===ql||n===Yl||n===Zl)if(r=t.get("WEBGL_compressed_texture_pvrtc"),r!==null){if(n===Xl)return r.COMPRESSED_RGB_PVRTC_4BPPV1_IMG;if(n===ql)return r.COMPRESSED_RGB_PVRTC_2BPPV1_IMG;if(n===Yl)return r.COMPRESSED_RGBA_PVRTC_4BPPV1_IMG;if(n===Zl)return r.COMPRESSED_RGBA_PVRTC_2BPPV1_IMG}else return null;if(n===$l||n===Jl||n===Kl||n===jl||n===Ql||n===oa||n===tc)if(r=t.get("WEBGL_compressed_texture_etc"),r!==null){if(n===$l||n===Jl)return o===Te?r.COMPRESSED_SRGB8_ETC2:r.COMPRESSED_RGB8_ETC2;if(n===Kl)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ETC2_EAC:r.COMPRESSED_RGBA8_ETC2_EAC;if(n===jl)return r.COMPRESSED_R11_EAC;if(n===Ql)return r.COMPRESSED_SIGNED_R11_EAC;if(n===oa)return r.COMPRESSED_RG11_EAC;if(n===tc)return r.COMPRESSED_SIGNED_RG11_EAC}else return null;if(n===ec||n===nc||n===ic||n===sc||n===rc||n===oc||n===ac||n===lc||n===cc||n===hc||n===uc||n===fc||n===dc||n===pc)if(r=t.get("WEBGL_compressed_texture_astc"),r!==null){if(n===ec)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_4x4_KHR:r.COMPRESSED_RGBA_ASTC_4x4_KHR;if(n===nc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_5x4_KHR:r.COMPRESSED_RGBA_ASTC_5x4_KHR;if(n===ic)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_5x5_KHR:r.COMPRESSED_RGBA_ASTC_5x5_KHR;if(n===sc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_6x5_KHR:r.COMPRESSED_RGBA_ASTC_6x5_KHR;if(n===rc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_6x6_KHR:r.COMPRESSED_RGBA_ASTC_6x6_KHR;if(n===oc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_8x5_KHR:r.COMPRESSED_RGBA_ASTC_8x5_KHR;if(n===ac)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_8x6_KHR:r.COMPRESSED_RGBA_ASTC_8x6_KHR;if(n===lc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_8x8_KHR:r.COMPRESSED_RGBA_ASTC_8x8_KHR;if(n===cc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_10x5_KHR:r.COMPRESSED_RGBA_ASTC_10x5_KHR;if(n===hc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_10x6_KHR:r.COMPRESSED_RGBA_ASTC_10x6_KHR;if(n===uc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_10x8_KHR:r.COMPRESSED_RGBA_ASTC_10x8_KHR;if(n===fc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_10x10_KHR:r.COMPRESSED_RGBA_ASTC_10x10_KHR;if(n===dc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_12x10_KHR:r.COMPRESSED_RGBA_ASTC_12x10_KHR;if(n===pc)return o===Te?r.COMPRESSED_SRGB8_ALPHA8_ASTC_12x12_KHR:r.COMPRESSED_RGBA_ASTC_12x12_KHR}else return null;if(n===mc||n===gc||n===_c)if(r=t.get("EXT_texture_compression_bptc"),r!==null){if(n===mc)return o===Te?r.COMPRESSED_SRGB_ALPHA_BPTC_UNORM_EXT:r.COMPRESSED_RGBA_BPTC_UNORM_EXT;if(n===gc)return r.COMPRESSED_RGB_BPTC_SIGNED_FLOAT_EXT;if(n===_c)return r.COMPRESSED_RGB_BPTC_UNSIGNED_FLOAT_EXT}else return null;if(n===xc||n===yc||n===aa||n===vc)if(r=t.get("EXT_texture_compression_rgtc"),r!==null){if(n===xc)return r.COMPRESSED_RED_RGTC1_EXT;if(n===yc)return r.COMPRESSED_SIGNED_RED_RGTC1_EXT;if(n===aa)return r.COMPRESSED_RED_GREEN_RGTC2_EXT;if(n===vc)return r.COMPRESSED_SIGNED_RED_GREEN_RGTC2_EXT}else return null;return n===tr?i.UNSIGNED_INT_24_8:i[n]!==void 0?i[n]:null}return{convert:e}}var kM=`
void main() {

	gl_Position = vec4( position, 1.0 );

}`,zM=`
uniform sampler2DArray depthColor;
uniform float depthWidth;
uniform float depthHeight;

void main() {

	vec2 coord = vec2( gl_FragCoord.x / depthWidth, gl_FragCoord.y / depthHeight );

	if ( coord.x >= 1.0 ) {

		gl_FragDepth = texture( depthColor, vec3( coord.x - 1.0, coord.y, 1 ) ).r;

	} else {

		gl_FragDepth = texture( depthColor, vec3( coord.x, coord.y, 0 ) ).r;

	}

}`,ku=class{constructor(){this.texture=null,this.mesh=null,this.depthNear=0,this.depthFar=0}init(t,e){if(this.texture===null){let n=new qo(t.texture);(t.depthNear!==e.depthNear||t.depthFar!==e.depthFar)&&(this.depthNear=t.depthNear,this.depthFar=t.depthFar),this.texture=n}}getMesh(t){if(this.texture!==null&&this.mesh===null){let e=t.cameras[0].viewport,n=new pi({vertexShader:kM,fragmentShader:zM,uniforms:{depthColor:{value:this.texture},depthWidth:{value:e.z},depthHeight:{value:e.w}}});this.mesh=new In(new Zs(20,20),n)}return this.mesh}reset(){this.texture=null,this.mesh=null}getDepthTexture(){return this.texture}},zu=class extends Ti{constructor(t,e){super();let n=this,s=null,r=1,o=null,a="local-floor",l=1,c=null,f=null,u=null,h=null,p=null,x=null,w=typeof XRWebGLBinding<"u",m=new ku,d={},v=e.getContextAttributes(),C=null,M=null,P=[],T=[],_=new Jt,E=null,B=null,N=new kn;N.viewport=new Xe;let D=new kn;D.viewport=new Xe;let k=[N,D],G=new Dl,L=null,H=null;this.cameraAutoUpdate=!0,this.enabled=!1,this.isPresenting=!1,this.getController=function(Q){let pt=P[Q];return pt===void 0&&(pt=new Xr,P[Q]=pt),pt.getTargetRaySpace()},this.getControllerGrip=function(Q){let pt=P[Q];return pt===void 0&&(pt=new Xr,P[Q]=pt),pt.getGripSpace()},this.getHand=function(Q){let pt=P[Q];return pt===void 0&&(pt=new Xr,P[Q]=pt),pt.getHandSpace()};function Y(Q){let pt=T.indexOf(Q.inputSource);if(pt===-1)return;let _t=P[pt];_t!==void 0&&(_t.update(Q.inputSource,Q.frame,c||o),_t.dispatchEvent({type:Q.type,data:Q.inputSource}))}function V(){s.removeEventListener("select",Y),s.removeEventListener("selectstart",Y),s.removeEventListener("selectend",Y),s.removeEventListener("squeeze",Y),s.removeEventListener("squeezestart",Y),s.removeEventListener("squeezeend",Y),s.removeEventListener("end",V),s.removeEventListener("inputsourceschange",lt);for(let Q=0;Q<P.length;Q++){let pt=T[Q];pt!==null&&(T[Q]=null,P[Q].disconnect(pt))}L=null,H=null,m.reset();for(let Q in d)delete d[Q];if(t.setRenderTarget(C),p=null,h=null,u=null,s=null,M=null,ht.stop(),n.isPresenting=!1,t.setPixelRatio(E),t.setSize(_.width,_.height,!1),B!==null){let Q=B.camera;Q.fov=B.fov,Q.zoom=B.zoom,Q.updateProjectionMatrix(),B=null}n.dispatchEvent({type:"sessionend"})}this.setFramebufferScaleFactor=function(Q){r=Q,n.isPresenting===!0&&qt("WebXRManager: Cannot change framebuffer scale while presenting.")},this.setReferenceSpaceType=function(Q){a=Q,n.isPresenting===!0&&qt("WebXRManager: Cannot change reference space type while presenting.")},this.getReferenceSpace=function(){return c||o},this.setReferenceSpace=function(Q){c=Q},this.getBaseLayer=function(){return h!==null?h:p},this.getBinding=function(){return u===null&&w&&(u=new XRWebGLBinding(s,e)),u},this.getFrame=function(){return x},this.getSession=function(){return s},this.setSession=async function(Q){if(s=Q,s!==null){if(C=t.getRenderTarget(),s.addEventListener("select",Y),s.addEventListener("selectstart",Y),s.addEventListener("selectend",Y),s.addEventListener("squeeze",Y),s.addEventListener("squeezestart",Y),s.addEventListener("squeezeend",Y),s.addEventListener("end",V),s.addEventListener("inputsourceschange",lt),v.xrCompatible!==!0&&await e.makeXRCompatible(),E=t.getPixelRatio(),t.getSize(_),w&&"createProjectionLayer"in XRWebGLBinding.prototype){let _t=null,Tt=null,St=null;v.depth&&(St=v.stencil?e.DEPTH24_STENCIL8:e.DEPTH_COMPONENT24,_t=v.stencil?os:ns,Tt=v.stencil?tr:Ai);let Gt={colorFormat:e.RGBA8,depthFormat:St,scaleFactor:r};u=this.getBinding(),h=u.createProjectionLayer(Gt),s.updateRenderState({layers:[h]}),t.setPixelRatio(1),t.setSize(h.textureWidth,h.textureHeight,!1),M=new Vn(h.textureWidth,h.textureHeight,{format:Ci,type:Xn,depthTexture:new ss(h.textureWidth,h.textureHeight,Tt,void 0,void 0,void 0,void 0,void 0,void 0,_t),stencilBuffer:v.stencil,colorSpace:t.outputColorSpace,samples:v.antialias?4:0,resolveDepthBuffer:h.ignoreDepthValues===!1,resolveStencilBuffer:h.ignoreDepthValues===!1,storeMultisampledDepthBuffer:h.ignoreDepthValues===!1,storeMultisampledStencilBuffer:h.ignoreDepthValues===!1})}else{let _t={antialias:v.antialias,alpha:!0,depth:v.depth,stencil:v.stencil,framebufferScaleFactor:r};p=new XRWebGLLayer(s,e,_t),s.updateRenderState({baseLayer:p}),t.setPixelRatio(1),t.setSize(p.framebufferWidth,p.framebufferHeight,!1),M=new Vn(p.framebufferWidth,p.framebufferHeight,{format:Ci,type:Xn,colorSpace:t.outputColorSpace,stencilBuffer:v.stencil,resolveDepthBuffer:p.ignoreDepthValues===!1,resolveStencilBuffer:p.ignoreDepthValues===!1,storeMultisampledDepthBuffer:p.ignoreDepthValues===!1,storeMultisampledStencilBuffer:p.ignoreDepthValues===!1})}M.isXRRenderTarget=!0,this.setFoveation(l),c=null,o=await s.requestReferenceSpace(a),ht.setContext(s),ht.start(),n.isPresenting=!0,n.dispatchEvent({type:"sessionstart"})}},this.getEnvironmentBlendMode=function(){if(s!==null)return s.environmentBlendMode},this.getDepthTexture=function(){return m.getDepthTexture()};function lt(Q){for(let pt=0;pt<Q.removed.length;pt++){let _t=Q.removed[pt],Tt=T.indexOf(_t);Tt>=0&&(T[Tt]=null,P[Tt].disconnect(_t))}for(let pt=0;pt<Q.added.length;pt++){let _t=Q.added[pt],Tt=T.indexOf(_t);if(Tt===-1){for(let Gt=0;Gt<P.length;Gt++)if(Gt>=T.length){T.push(_t),Tt=Gt;break}else if(T[Gt]===null){T[Gt]=_t,Tt=Gt;break}if(Tt===-1)break}let St=P[Tt];St&&St.connect(_t)}}function J(Q,pt){pt===null?Q.matrixWorld.copy(Q.matrix):Q.matrixWorld.multiplyMatrices(pt.matrixWorld,Q.matrix),Q.matrixWorldInverse.copy(Q.matrixWorld).invert()}this.updateCamera=function(Q){if(s===null)return;let pt=Q.near,_t=Q.far;m.texture!==null&&(m.depthNear>0&&(pt=m.depthNear),m.depthFar>0&&(_t=m.depthFar)),G.near=D.near=N.near=pt,G.far=D.far=N.far=_t,(L!==G.near||H!==G.far)&&(s.updateRenderState({depthNear:G.near,depthFar:G.far}),L=G.near,H=G.far),G.layers.mask=Q.layers.mask|6,N.layers.mask=G.layers.mask&-5,D.layers.mask=G.layers.mask&-3;let Tt=Q.parent,St=G.cameras;J(G,Tt);for(let Gt=0;Gt<St.length;Gt++)J(St[Gt],Tt);G.projectionMatrix.copy(N.projectionMatrix),G.projectionMatrixInverse.copy(N.projectionMatrixInverse),B===null&&Q.isPerspectiveCamera&&(B={camera:Q,fov:Q.fov,zoom:Q.zoom}),j(Q,G,Tt)};function j(Q,pt,_t){_t===null?Q.matrix.copy(pt.matrixWorld):(Q.matrix.copy(_t.matrixWorld),Q.matrix.invert(),Q.matrix.multiply(pt.matrixWorld)),Q.matrix.decompose(Q.position,Q.quaternion,Q.scale),Q.updateMatrixWorld(!0),Q.projectionMatrix.copy(pt.projectionMatrix),Q.projectionMatrixInverse.copy(pt.projectionMatrixInverse),Q.isPerspectiveCamera&&(Q.fov=Hr*2*Math.atan(1/Q.projectionMatrix.elements[5]),Q.zoom=1)}this.getCamera=function(){return G},this.getFoveation=function(){if(!(h===null&&p===null))return l},this.setFoveation=function(Q){l=Q,h!==null&&(h.fixedFoveation=Q),p!==null&&p.fixedFoveation!==void 0&&(p.fixedFoveation=Q)},this.hasDepthSensing=function(){return m.texture!==null},this.getDepthSensingMesh=function(){return m.getMesh(G)},this.getCameraTexture=function(Q){return d[Q]};let it=null;function ut(Q,pt){if(f=pt.getViewerPose(c||o),x=pt,f!==null){let _t=f.views;p!==null&&(t.setRenderTargetFramebuffer(M,p.framebuffer),t.setRenderTarget(M));let Tt=!1;_t.length!==G.cameras.length&&(G.cameras.length=0,Tt=!0);for(let zt=0;zt<_t.length;zt++){let ce=_t[zt],re=null;if(p!==null)re=p.getViewport(ce);else{let He=u.getViewSubImage(h,ce);re=He.viewport,zt===0&&(t.setRenderTargetTextures(M,He.colorTexture,He.depthStencilTexture),t.setRenderTarget(M))}let te=k[zt];te===void 0&&(te=new kn,te.layers.enable(zt),te.viewport=new Xe,k[zt]=te),te.matrix.fromArray(ce.transform.matrix),te.matrix.decompose(te.position,te.quaternion,te.scale),te.projectionMatrix.fromArray(ce.projectionMatrix),te.projectionMatrixInverse.copy(te.projectionMatrix).invert(),te.viewport.set(re.x,re.y,re.width,re.height),zt===0&&(G.matrix.copy(te.matrix),G.matrix.decompose(G.position,G.quaternion,G.scale)),Tt===!0&&G.cameras.push(te)}let St=s.enabledFeatures;if(St&&St.includes("depth-sensing")&&s.depthUsage=="gpu-optimized"&&w){u=n.getBinding();let zt=u.getDepthInformation(_t[0]);zt&&zt.isValid&&zt.texture&&m.init(zt,s.renderState)}if(St&&St.includes("camera-access")&&w){t.state.unbindTexture(),u=n.getBinding();for(let zt=0;zt<_t.length;zt++){let ce=_t[zt].camera;if(ce){let re=d[ce];re||(re=new qo,d[ce]=re);let te=u.getCameraImage(ce);re.sourceTexture=te}}}}for(let _t=0;_t<P.length;_t++){let Tt=T[_t],St=P[_t];Tt!==null&&St!==void 0&&St.update(Tt,pt,c||o)}it&&it(Q,pt),pt.detectedPlanes&&n.dispatchEvent({type:"planesdetected",data:pt}),x=null}let ht=new bm;ht.setAnimationLoop(ut),this.setAnimationLoop=function(Q){it=Q},this.dispose=function(){}}},VM=new Se,Dm=new Qt;Dm.set(-1,0,0,0,1,0,0,0,1);function GM(i,t){function e(m,d){m.matrixAutoUpdate===!0&&m.updateMatrix(),d.value.copy(m.matrix)}function n(m,d){d.color.getRGB(m.fogColor.value,Au(i)),d.isFog?(m.fogNear.value=d.near,m.fogFar.value=d.far):d.isFogExp2&&(m.fogDensity.value=d.density)}function s(m,d,v,C,M){d.isNodeMaterial?d.uniformsNeedUpdate=!1:d.isMeshBasicMaterial?r(m,d):d.isMeshLambertMaterial?(r(m,d),d.envMap&&(m.envMapIntensity.value=d.envMapIntensity)):d.isMeshToonMaterial?(r(m,d),u(m,d)):d.isMeshPhongMaterial?(r(m,d),f(m,d),d.envMap&&(m.envMapIntensity.value=d.envMapIntensity)):d.isMeshStandardMaterial?(r(m,d),h(m,d),d.isMeshPhysicalMaterial&&p(m,d,M)):d.isMeshMatcapMaterial?(r(m,d),x(m,d)):d.isMeshDepthMaterial?r(m,d):d.isMeshDistanceMaterial?(r(m,d),w(m,d)):d.isMeshNormalMaterial?r(m,d):d.isLineBasicMaterial?(o(m,d),d.isLineDashedMaterial&&a(m,d)):d.isPointsMaterial?l(m,d,v,C):d.isSpriteMaterial?c(m,d):d.isShadowMaterial?(m.color.value.copy(d.color),m.opacity.value=d.opacity):d.isShaderMaterial&&(d.uniformsNeedUpdate=!1)}function r(m,d){m.opacity.value=d.opacity,d.color&&m.diffuse.value.copy(d.color),d.emissive&&m.emissive.value.copy(d.emissive).multiplyScalar(d.emissiveIntensity),d.map&&(m.map.value=d.map,e(d.map,m.mapTransform)),d.alphaMap&&(m.alphaMap.value=d.alphaMap,e(d.alphaMap,m.alphaMapTransform)),d.bumpMap&&(m.bumpMap.value=d.bumpMap,e(d.bumpMap,m.bumpMapTransform),m.bumpScale.value=d.bumpScale,d.side===Gn&&(m.bumpScale.value*=-1)),d.normalMap&&(m.normalMap.value=d.normalMap,e(d.normalMap,m.normalMapTransform),m.normalScale.value.copy(d.normalScale),d.side===Gn&&m.normalScale.value.negate()),d.displacementMap&&(m.displacementMap.value=d.displacementMap,e(d.displacementMap,m.displacementMapTransform),m.displacementScale.value=d.displacementScale,m.displacementBias.value=d.displacementBias),d.emissiveMap&&(m.emissiveMap.value=d.emissiveMap,e(d.emissiveMap,m.emissiveMapTransform)),d.specularMap&&(m.specularMap.value=d.specularMap,e(d.specularMap,m.specularMapTransform)),d.alphaTest>0&&(m.alphaTest.value=d.alphaTest);let v=t.get(d),C=v.envMap,M=v.envMapRotation;C&&(m.envMap.value=C,m.envMapRotation.value.setFromMatrix4(VM.makeRotationFromEuler(M)).transpose(),C.isCubeTexture&&C.isRenderTargetTexture===!1&&m.envMapRotation.value.premultiply(Dm),m.reflectivity.value=d.reflectivity,m.ior.value=d.ior,m.refractionRatio.value=d.refractionRatio),d.lightMap&&(m.lightMap.value=d.lightMap,m.lightMapIntensity.value=d.lightMapIntensity,e(d.lightMap,m.lightMapTransform)),d.aoMap&&(m.aoMap.value=d.aoMap,m.aoMapIntensity.value=d.aoMapIntensity,e(d.aoMap,m.aoMapTransform))}function o(m,d){m.diffuse.value.copy(d.color),m.opacity.value=d.opacity,d.map&&(m.map.value=d.map,e(d.map,m.mapTransform))}function a(m,d){m.dashSize.value=d.dashSize,m.totalSize.value=d.dashSize+d.gapSize,m.scale.value=d.scale}function l(m,d,v,C){m.diffuse.value.copy(d.color),m.opacity.value=d.opacity,m.size.value=d.size*v,m.scale.value=C*.5,d.map&&(m.map.value=d.map,e(d.map,m.uvTransform)),d.alphaMap&&(m.alphaMap.value=d.alphaMap,e(d.alphaMap,m.alphaMapTransform)),d.alphaTest>0&&(m.alphaTest.value=d.alphaTest)}function c(m,d){m.diffuse.value.copy(d.color),m.opacity.value=d.opacity,m.rotation.value=d.rotation,d.map&&(m.map.value=d.map,e(d.map,m.mapTransform)),d.alphaMap&&(m.alphaMap.value=d.alphaMap,e(d.alphaMap,m.alphaMapTransform)),d.alphaTest>0&&(m.alphaTest.value=d.alphaTest)}function f(m,d){m.specular.value.copy(d.specular),m.shininess.value=Math.max(d.shininess,1e-4)}function u(m,d){d.gradientMap&&(m.gradientMap.value=d.gradientMap)}function h(m,d){m.metalness.value=d.metalness,d.metalnessMap&&(m.metalnessMap.value=d.metalnessMap,e(d.metalnessMap,m.metalnessMapTransform)),m.roughness.value=d.roughness,d.roughnessMap&&(m.roughnessMap.value=d.roughnessMap,e(d.roughnessMap,m.roughnessMapTransform)),d.envMap&&(m.envMapIntensity.value=d.envMapIntensity)}function p(m,d,v){m.ior.value=d.ior,d.diffuseRoughness>0&&(m.diffuseRoughness.value=d.diffuseRoughness,d.diffuseRoughnessMap&&(m.diffuseRoughnessMap.value=d.diffuseRoughnessMap,e(d.diffuseRoughnessMap,m.diffuseRoughnessMapTransform))),d.sheen>0&&(m.sheenColor.value.copy(d.sheenColor).multiplyScalar(d.sheen),m.sheenRoughness.value=d.sheenRoughness,d.sheenColorMap&&(m.sheenColorMap.value=d.sheenColorMap,e(d.sheenColorMap,m.sheenColorMapTransform)),d.sheenRoughnessMap&&(m.sheenRoughnessMap.value=d.sheenRoughnessMap,e(d.sheenRoughnessMap,m.sheenRoughnessMapTransform))),d.clearcoat>0&&(m.clearcoat.value=d.clearcoat,m.clearcoatRoughness.value=d.clearcoatRoughness,d.clearcoatMap&&(m.clearcoatMap.value=d.clearcoatMap,e(d.clearcoatMap,m.clearcoatMapTransform)),d.clearcoatRoughnessMap&&(m.clearcoatRoughnessMap.value=d.clearcoatRoughnessMap,e(d.clearcoatRoughnessMap,m.clearcoatRoughnessMapTransform)),d.clearcoatNormalMap&&(m.clearcoatNormalMap.value=d.clearcoatNormalMap,e(d.clearcoatNormalMap,m.clearcoatNormalMapTransform),m.clearcoatNormalScale.value.copy(d.clearcoatNormalScale),d.side===Gn&&m.clearcoatNormalScale.value.negate())),d.dispersion>0&&(m.dispersion.value=d.dispersion),d.retroreflectivity>0&&(m.retroreflectivity.value=d.retroreflectivity),d.iridescence>0&&(m.iridescence.value=d.iridescence,m.iridescenceIOR.value=d.iridescenceIOR,m.iridescenceThicknessMinimum.value=d.iridescenceThicknessMinimum,m.iridescenceThicknessMaximum.value=d.iridescenceThicknessMaximum,d.iridescenceMap&&(m.iridescenceMap.value=d.iridescenceMap,e(d.iridescenceMap,m.iridescenceMapTransform)),d.iridescenceThicknessMap&&(m.iridescenceThicknessMap.value=d.iridescenceThicknessMap,e(d.iridescenceThicknessMap,m.iridescenceThicknessMapTransform))),d.transmission>0&&(m.transmission.value=d.transmission,m.transmissionSamplerMap.value=v.texture,m.transmissionSamplerSize.value.set(v.width,v.height),d.transmissionMap&&(m.transmissionMap.value=d.transmissionMap,e(d.transmissionMap,m.transmissionMapTransform)),m.thickness.value=d.thickness,d.thicknessMap&&(m.thicknessMap.value=d.thicknessMap,e(d.thicknessMap,m.thicknessMapTransform)),m.attenuationDistance.value=d.attenuationDistance,m.attenuationColor.value.copy(d.attenuationColor)),d.anisotropy>0&&(m.anisotropyVector.value.set(d.anisotropy*Math.cos(d.anisotropyRotation),d.anisotropy*Math.sin(d.anisotropyRotation)),d.anisotropyMap&&(m.anisotropyMap.value=d.anisotropyMap,e(d.anisotropyMap,m.anisotropyMapTransform))),m.specularIntensity.value=d.specularIntensity,m.specularColor.value.copy(d.specularColor),d.specularColorMap&&(m.specularColorMap.value=d.specularColorMap,e(d.specularColorMap,m.specularColorMapTransform)),d.specularIntensityMap&&(m.specularIntensityMap.value=d.specularIntensityMap,e(d.specularIntensityMap,m.specularIntensityMapTransform))}function x(m,d){d.matcap&&(m.matcap.value=d.matcap)}function w(m,d){let v=t.get(d).light;m.referencePosition.value.setFromMatrixPosition(v.matrixWorld),m.nearDistance.value=v.shadow.camera.near,m.farDistance.value=v.shadow.camera.far}return{refreshFogUniforms:n,refreshMaterialUniforms:s}}function HM(i,t,e,n){let s={},r={};function o(v,C){let M=C.program;n.uniformBlockBinding(v,M,s[v.id])}function a(v,C){let M=s[v.id];M===void 0&&(x(v),M=l(v),s[v.id]=M,v.addEventListener("dispose",m));let P=C.program;n.updateUBOMapping(v,P);let T=t.render.frame;r[v.id]!==T&&(c(v),r[v.id]=T)}function l(v){let C=i.createBuffer(),M=v.__size,P=v.usage;return i.bindBuffer(i.UNIFORM_BUFFER,C),i.bufferData(i.UNIFORM_BUFFER,M,P),i.bindBuffer(i.UNIFORM_BUFFER,null),C}function c(v){let C=s[v.id],M=v.uniforms,P=v.__cache;i.bindBuffer(i.UNIFORM_BUFFER,C);for(let T=0,_=M.length;T<_;T++){let E=M[T];if(Array.isArray(E))for(let B=0,N=E.length;B<N;B++)f(E[B],T,B,P);else f(E,T,0,P)}i.bindBuffer(i.UNIFORM_BUFFER,null)}function f(v,C,M,P){if(h(v,C,M,P)===!0){let T=v.__offset,_=v.value;if(Array.isArray(_)){let E=0;for(let B=0;B<_.length;B++){let N=_[B],D=w(N,!0);u(N,v.__data,E),E+=D.storage/Float32Array.BYTES_PER_ELEMENT}}else u(_,v.__data,0);i.bufferSubData(i.UNIFORM_BUFFER,T,v.__data)}}function u(v,C,M){typeof v=="number"||typeof v=="boolean"?C[M]=v:v.isMatrix3?(C[M]=v.elements[0],C[M+1]=v.elements[1],C[M+2]=v.elements[2],C[M+3]=0,C[M+4]=v.elements[3],C[M+5]=v.elements[4],C[M+6]=v.elements[5],C[M+7]=0,C[M+8]=v.elements[6],C[M+9]=v.elements[7],C[M+10]=v.elements[8],C[M+11]=0):ArrayBuffer.isView(v)?C.set(v.subarray(0,C.length-M),M):v.toArray(C,M)}function h(v,C,M,P){let T=v.value,_=C+"_"+M;if(Array.isArray(T)){P[_]===void 0&&(P[_]=[]);let E=P[_],B=!1;for(let N=0;N<T.length;N++)p(T[N],E,N)===!0&&(B=!0);return B}return p(T,P,_)}function p(v,C,M){if(C[M]===void 0)return typeof v=="number"||typeof v=="boolean"?C[M]=v:ArrayBuffer.isView(v)?C[M]=v.slice():C[M]=v.clone(),!0;{let P=C[M];if(typeof v=="number"||typeof v=="boolean"){if(P!==v)return C[M]=v,!0}else{if(ArrayBuffer.isView(v))return!0;if(P.equals(v)===!1)return P.copy(v),!0}}return!1}function x(v){let C=v.uniforms,M=0,P=16;for(let _=0,E=C.length;_<E;_++){let B=Array.isArray(C[_])?C[_]:[C[_]];for(let N=0,D=B.length;N<D;N++){let k=B[N],G=Array.isArray(k.value)?k.value:[k.value],L=Array.isArray(C[_])||Array.isArray(k.value),H=M;for(let V=0,lt=G.length;V<lt;V++){let J=G[V],j=w(J,L),it=M%P,ut=it%j.boundary,ht=it+ut;M+=ut,ht!==0&&P-ht<j.storage&&(M+=P-ht),V===0&&(H=M),M+=j.storage}let Y=k.type==="int"?Int32Array:k.type==="uint"?Uint32Array:Float32Array;k.__data=new Y((M-H)/Float32Array.BYTES_PER_ELEMENT),k.__offset=H}}let T=M%P;return T>0&&(M+=P-T),v.__size=M,v.__cache={},this}function w(v,C){let M={boundary:0,storage:0};return typeof v=="number"||typeof v=="boolean"?(M.boundary=4,M.storage=4):v.isVector2?(M.boundary=8,M.storage=8):v.isVector3||v.isColor?(M.boundary=16,M.storage=12):v.isVector4?(M.boundary=16,M.storage=16):v.isMatrix3?(M.boundary=16,M.storage=48):v.isMatrix4?(M.boundary=16,M.storage=64):v.isTexture?qt("WebGLRenderer: Texture samplers can not be part of an uniforms group."):ArrayBuffer.isView(v)?(M.boundary=16,M.storage=v.byteLength):qt("WebGLRenderer: Unsupported uniform value type.",v),C===!0&&(M.boundary=16,M.storage=Math.ceil(M.storage/16)*16),M}function m(v){let C=v.target;C.removeEventListener("dispose",m),i.deleteBuffer(s[C.id]),delete s[C.id],delete r[C.id]}function d(){for(let v in s)i.deleteBuffer(s[v]);s={},r={}}return{bind:o,update:a,dispose:d}}var WM=new Uint16Array([12469,15057,12620,14925,13266,14620,13807,14376,14323,13990,14545,13625,14713,13328,14840,12882,14931,12528,14996,12233,15039,11829,15066,11525,15080,11295,15085,10976,15082,10705,15073,10495,13880,14564,13898,14542,13977,14430,14158,14124,14393,13732,14556,13410,14702,12996,14814,12596,14891,12291,14937,11834,14957,11489,14958,11194,14943,10803,14921,10506,14893,10278,14858,9960,14484,14039,14487,14025,14499,13941,14524,13740,14574,13468,14654,13106,14743,12678,14818,12344,14867,11893,14889,11509,14893,11180,14881,10751,14852,10428,14812,10128,14765,9754,14712,9466,14764,13480,14764,13475,14766,13440,14766,13347,14769,13070,14786,12713,14816,12387,14844,11957,14860,11549,14868,11215,14855,10751,14825,10403,14782,10044,14729,9651,14666,9352,14599,9029,14967,12835,14966,12831,14963,12804,14954,12723,14936,12564,14917,12347,14900,11958,14886,11569,14878,11247,14859,10765,14828,10401,14784,10011,14727,9600,14660,9289,14586,8893,14508,8533,15111,12234,15110,12234,15104,12216,15092,12156,15067,12010,15028,11776,14981,11500,14942,11205,14902,10752,14861,10393,14812,9991,14752,9570,14682,9252,14603,8808,14519,8445,14431,8145,15209,11449,15208,11451,15202,11451,15190,11438,15163,11384,15117,11274,15055,10979,14994,10648,14932,10343,14871,9936,14803,9532,14729,9218,14645,8742,14556,8381,14461,8020,14365,7603,15273,10603,15272,10607,15267,10619,15256,10631,15231,10614,15182,10535,15118,10389,15042,10167,14963,9787,14883,9447,14800,9115,14710,8665,14615,8318,14514,7911,14411,7507,14279,7198,15314,9675,15313,9683,15309,9712,15298,9759,15277,9797,15229,9773,15166,9668,15084,9487,14995,9274,14898,8910,14800,8539,14697,8234,14590,7790,14479,7409,14367,7067,14178,6621,15337,8619,15337,8631,15333,8677,15325,8769,15305,8871,15264,8940,15202,8909,15119,8775,15022,8565,14916,8328,14804,8009,14688,7614,14569,7287,14448,6888,14321,6483,14088,6171,15350,7402,15350,7419,15347,7480,15340,7613,15322,7804,15287,7973,15229,8057,15148,8012,15046,7846,14933,7611,14810,7357,14682,7069,14552,6656,14421,6316,14251,5948,14007,5528,15356,5942,15356,5977,15353,6119,15348,6294,15332,6551,15302,6824,15249,7044,15171,7122,15070,7050,14949,6861,14818,6611,14679,6349,14538,6067,14398,5651,14189,5311,13935,4958,15359,4123,15359,4153,15356,4296,15353,4646,15338,5160,15311,5508,15263,5829,15188,6042,15088,6094,14966,6001,14826,5796,14678,5543,14527,5287,14377,4985,14133,4586,13869,4257,15360,1563,15360,1642,15358,2076,15354,2636,15341,3350,15317,4019,15273,4429,15203,4732,15105,4911,14981,4932,14836,4818,14679,4621,14517,4386,14359,4156,14083,3795,13808,3437,15360,122,15360,137,15358,285,15355,636,15344,1274,15322,2177,15281,2765,15215,3223,15120,3451,14995,3569,14846,3567,14681,3466,14511,3305,14344,3121,14037,2800,13753,2467,15360,0,15360,1,15359,21,15355,89,15346,253,15325,479,15287,796,15225,1148,15133,1492,15008,1749,14856,1882,14685,1886,14506,1783,14324,1608,13996,1398,13702,1183]),Vi=null;function XM(){return Vi===null&&(Vi=new Go(WM,16,16,Ls,Ri),Vi.name="DFG_LUT",Vi.minFilter=zn,Vi.magFilter=zn,Vi.wrapS=ki,Vi.wrapT=ki,Vi.generateMipmaps=!1,Vi.needsUpdate=!0),Vi}var Ec=class{constructor(t={}){let{canvas:e=qp(),context:n=null,depth:s=!0,stencil:r=!1,alpha:o=!1,antialias:a=!1,premultipliedAlpha:l=!0,preserveDrawingBuffer:c=!1,powerPreference:f="default",failIfMajorPerformanceCaveat:u=!1,reversedDepthBuffer:h=!1,outputBufferType:p=Xn}=t;this.isWebGLRenderer=!0;let x;if(n!==null){if(typeof WebGLRenderingContext<"u"&&n instanceof WebGLRenderingContext)throw new Error("THREE.WebGLRenderer: WebGL 1 is not supported since r163.");x=n.getContextAttributes().alpha}else x=o;let w=p,m=new Set([Wl,Hl,Gl]),d=new Set([Xn,Ai,no,tr,kl,zl]),v=new Uint32Array(4),C=new Int32Array(4),M={textures:[],min:[],max:[],resolution:[]},P=null,T=null,_=[],E=[],B=null;this.domElement=e,this.debug={checkShaderErrors:!0,diagnostics:{keywords:!1},onShaderError:null},this.autoClear=!0,this.autoClearColor=!0,this.autoClearDepth=!0,this.autoClearStencil=!0,this.sortObjects=!0,this.clippingPlanes=[],this.localClippingEnabled=!1,this.toneMapping=zi,this.toneMappingExposure=1,this.transmissionResolutionScale=1;let N=this,D=!1,k=null,G=null,L=null,H=null;this._outputColorSpace=ii;let Y=0,V=0,lt=null,J=-1,j=null,it=new Xe,ut=new Xe,ht=null,Q=new ae(0),pt=0,_t=e.width,Tt=e.height,St=1,Gt=null,ne=null,zt=new Xe(0,0,_t,Tt),ce=new Xe(0,0,_t,Tt),re=!1,te=new Es,He=new xl,Ue=!1,tn=!1,Pe=new Se,_n=new W,_e=new Xe,cn={background:null,fog:null,environment:null,overrideMaterial:null,isScene:!0},Ye=!1;function en(){return lt===null?St:1}let F=n;function Rt(b,O){return e.getContext(b,O)}let Xt,ie,Mt,Le,kt,Wt,A,y,X,ct,rt,gt,xt,tt,nt,dt,U,st,et,bt,mt,vt,Vt;try{let b={alpha:!0,depth:s,stencil:r,antialias:a,premultipliedAlpha:l,preserveDrawingBuffer:c,powerPreference:f,failIfMajorPerformanceCaveat:u};if("setAttribute"in e&&e.setAttribute("data-engine",`three.js r${"187"}`),e.addEventListener("webglcontextlost",Ft,!1),e.addEventListener("webglcontextrestored",$t,!1),e.addEventListener("webglcontextcreationerror",At,!1),F===null){let O="webgl2";if(F=Rt(O,b),F===null)throw Rt(O)?new Error("THREE.WebGLRenderer: Error creating WebGL context with your selected attributes."):new Error("THREE.WebGLRenderer: Error creating WebGL context.")}Zt()}catch(b){throw e.removeEventListener("webglcontextlost",Ft,!1),e.removeEventListener("webglcontextrestored",$t,!1),e.removeEventListener("webglcontextcreationerror",At,!1),jt("WebGLRenderer: "+b.message),b}function Zt(){Xt=new nS(F),Xt.init(),mt=new BM(F,Xt),ie=new Xv(F,Xt,t,mt),Mt=new FM(F,Xt),ie.reversedDepthBuffer&&h&&Mt.buffers.depth.setReversed(!0),G=F.createFramebuffer(),L=F.createFramebuffer(),H=F.createFramebuffer(),Le=new rS(F),kt=new MM,Wt=new OM(F,Xt,Mt,kt,ie,mt,Le),A=new eS(N),y=new ax(F),vt=new Hv(F,y),X=new iS(F,y,Le,vt),ct=new aS(F,X,y,vt,Le),st=new oS(F,ie,Wt),nt=new qv(kt),rt=new SM(N,A,Xt,ie,vt,nt),gt=new GM(N,kt),xt=new wM,tt=new PM(Xt),U=new Gv(N,A,Mt,ct,x,l),dt=new UM(N,ct,ie),Vt=new HM(F,Le,ie,Mt),et=new Wv(F,Xt,Le),bt=new sS(F,Xt,Le),Le.programs=rt.programs,N.capabilities=ie,N.extensions=Xt,N.properties=kt,N.renderLists=xt,N.shadowMap=dt,N.state=Mt,N.info=Le}w!==Xn&&(B=new cS(w,e.width,e.height,a,s,r));let at=new zu(N,F);this.xr=at,this.getContext=function(){return F},this.getContextAttributes=function(){return F.getContextAttributes()},this.forceContextLoss=function(){let b=Xt.get("WEBGL_lose_context");b&&b.loseContext()},this.forceContextRestore=function(){let b=Xt.get("WEBGL_lose_context");b&&b.restoreContext()},this.getPixelRatio=function(){return St},this.setPixelRatio=function(b){b!==void 0&&(St=b,this.setSize(_t,Tt,!1))},this.getSize=function(b){return b.set(_t,Tt)},this.setSize=function(b,O,K=!0){if(at.isPresenting){qt("WebGLRenderer: Can't change size while VR device is presenting.");return}_t=b,Tt=O,e.width=Math.floor(b*St),e.height=Math.floor(O*St),K===!0&&(e.style.width=b+"px",e.style.height=O+"px"),B!==null&&B.setSize(e.width,e.height),this.setViewport(0,0,b,O)},this.getDrawingBufferSize=function(b){return b.set(_t*St,Tt*St).floor()},this.setDrawingBufferSize=function(b,O,K){_t=b,Tt=O,St=K,e.width=Math.floor(b*K),e.height=Math.floor(O*K),this.setViewport(0,0,b,O)},this.setEffects=function(b){if(w===Xn){jt("WebGLRenderer: setEffects() requires outputBufferType set to HalfFloatType or FloatType.");return}if(b){for(let O=0;O<b.length;O++)if(b[O].isOutputPass===!0){qt("WebGLRenderer: OutputPass is not needed in setEffects(). Tone mapping and color space conversion are applied automatically.");break}}B.setEffects(b||[])},this.getCurrentViewport=function(b){return b.copy(it)},this.getViewport=function(b){return b.copy(zt)},this.setViewport=function(b,O,K,q){b.isVector4?zt.set(b.x,b.y,b.z,b.w):zt.set(b,O,K,q),Mt.viewport(it.copy(zt).multiplyScalar(en()).round())},this.getScissor=function(b){return b.copy(ce)},this.setScissor=function(b,O,K,q){b.isVector4?ce.set(b.x,b.y,b.z,b.w):ce.set(b,O,K,q),Mt.scissor(ut.copy(ce).multiplyScalar(en()).round())},this.getScissorTest=function(){return re},this.setScissorTest=function(b){Mt.setScissorTest(re=b)},this.setOpaqueSort=function(b){Gt=b},this.setTransparentSort=function(b){ne=b},this.getClearColor=function(b){return b.copy(U.getClearColor())},this.setClearColor=function(){U.setClearColor(...arguments)},this.getClearAlpha=function(){return U.getClearAlpha()},this.setClearAlpha=function(){U.setClearAlpha(...arguments)},this.clear=function(b=!0,O=!0,K=!0){let q=0;if(b){let Z=!1;if(lt!==null){let wt=lt.texture.format;Z=m.has(wt)}if(Z){let wt=lt.texture.type,Ct=d.has(wt),Et=U.getClearColor(),Pt=U.getClearAlpha(),Bt=Et.r,Kt=Et.g,he=Et.b;Ct?(v[0]=Bt,v[1]=Kt,v[2]=he,v[3]=Pt,F.clearBufferuiv(F.COLOR,0,v)):(C[0]=Bt,C[1]=Kt,C[2]=he,C[3]=Pt,F.clearBufferiv(F.COLOR,0,C))}else q|=F.COLOR_BUFFER_BIT}O&&(q|=F.DEPTH_BUFFER_BIT,this.state.buffers.depth.setMask(!0)),K&&(q|=F.STENCIL_BUFFER_BIT,this.state.buffers.stencil.setMask(4294967295)),q!==0&&F.clear(q)},this.clearColor=function(){this.clear(!0,!1,!1)},this.clearDepth=function(){this.clear(!1,!0,!1)},this.clearStencil=function(){this.clear(!1,!1,!0)},this.setNodesHandler=function(b){b.setRenderer(this),k=b},this.dispose=function(){e.removeEventListener("webglcontextlost",Ft,!1),e.removeEventListener("webglcontextrestored",$t,!1),e.removeEventListener("webglcontextcreationerror",At,!1),U.dispose(),xt.dispose(),tt.dispose(),Wt.dispose(),kt.dispose(),A.dispose(),ct.dispose(),X.dispose(),vt.dispose(),Vt.dispose(),rt.dispose(),at.dispose(),at.removeEventListener("sessionstart",fa),at.removeEventListener("sessionend",Pi),Hi.stop()};function Ft(b){b.preventDefault(),Mu("WebGLRenderer: Context Lost."),D=!0}function $t(){Mu("WebGLRenderer: Context Restored."),D=!1;let b=Le.autoReset,O=dt.enabled,K=dt.autoUpdate,q=dt.needsUpdate,Z=dt.type;Zt(),Le.autoReset=b,dt.enabled=O,dt.autoUpdate=K,dt.needsUpdate=q,dt.type=Z}function At(b){jt("WebGLRenderer: A WebGL context could not be created. Reason: ",b.statusMessage)}function se(b){let O=b.target;O.removeEventListener("dispose",se),Oe(O)}function Oe(b){Dn(b),kt.remove(b)}function Dn(b){let O=kt.get(b).programs;O!==void 0&&(O.forEach(function(K){rt.releaseProgram(K)}),b.isShaderMaterial&&rt.releaseShaderCache(b))}this.renderBufferDirect=function(b,O,K,q,Z,wt){O===null&&(O=cn);let Ct=Z.isMesh&&Z.matrixWorld.determinantAffine()<0,Et=ho(b,O,K,q,Z);Mt.setMaterial(q,Ct);let Pt=K.index,Bt=1;if(q.wireframe===!0){if(Pt=X.getWireframeAttribute(K),Pt===void 0)return;Bt=2}let Kt=K.drawRange,he=K.attributes.position,Ot=Kt.start*Bt,ue=(Kt.start+Kt.count)*Bt;wt!==null&&(Ot=Math.max(Ot,wt.start*Bt),ue=Math.min(ue,(wt.start+wt.count)*Bt)),Pt!==null?(Ot=Math.max(Ot,0),ue=Math.min(ue,Pt.count)):he!=null&&(Ot=Math.max(Ot,0),ue=Math.min(ue,he.count));let qe=ue-Ot;if(qe<0||qe===1/0)return;vt.setup(Z,q,Et,K,Pt);let Ae,Re=et;if(Pt!==null&&(Ae=y.get(Pt),Re=bt,Re.setIndex(Ae)),Z.isMesh)q.wireframe===!0?(Mt.setLineWidth(q.wireframeLinewidth*en()),Re.setMode(F.LINES)):Re.setMode(F.TRIANGLES);else if(Z.isLine){let hn=q.linewidth;hn===void 0&&(hn=1),Mt.setLineWidth(hn*en()),Z.isLineSegments?Re.setMode(F.LINES):Z.isLineLoop?Re.setMode(F.LINE_LOOP):Re.setMode(F.LINE_STRIP)}else Z.isPoints?Re.setMode(F.POINTS):Z.isSprite&&Re.setMode(F.TRIANGLES);if(Z.isBatchedMesh)if(Xt.get("WEBGL_multi_draw"))Re.renderMultiDraw(Z._multiDrawStarts,Z._multiDrawCounts,Z._multiDrawCount);else{let hn=Z._multiDrawStarts,Nt=Z._multiDrawCounts,nn=Z._multiDrawCount,pe=Pt?y.get(Pt).bytesPerElement:1,Xi=kt.get(q).currentProgram.getUniforms();for(let sn=0;sn<nn;sn++)Xi.setValue(F,"_gl_DrawID",sn),Re.render(hn[sn]/pe,Nt[sn])}else if(Z.isInstancedMesh)Re.renderInstances(Ot,qe,Z.count);else if(K.isInstancedBufferGeometry){let hn=K._maxInstanceCount!==void 0?K._maxInstanceCount:1/0,Nt=Math.min(K.instanceCount,hn);Re.renderInstances(Ot,qe,Nt)}else Re.render(Ot,qe)};function ao(b,O,K,q){k!==null&&b.isNodeMaterial&&k.setObject(q,b),Ue===!0&&nt.setState(b,K,!1),b.transparent===!0&&b.side===mi&&b.forceSinglePass===!1?(b.side=Gn,b.needsUpdate=!0,Ii(b,O,q),b.side=Is,b.needsUpdate=!0,Ii(b,O,q),b.side=mi):Ii(b,O,q)}this.compile=function(b,O,K=null){K===null&&(K=b),k!==null&&k.renderStart(b,O,K),T=tt.get(K),T.init(O),E.push(T),K.traverseVisible(function(Z){Z.isLight&&Z.layers.test(O.layers)&&(T.pushLight(Z),Z.castShadow&&T.pushShadow(Z))}),b!==K&&b.traverseVisible(function(Z){Z.isLight&&Z.layers.test(O.layers)&&(T.pushLight(Z),Z.castShadow&&T.pushShadow(Z))}),T.setupLights(),k!==null&&k.updateLights(T.state.lightsArray),tn=this.localClippingEnabled,Ue=nt.init(this.clippingPlanes,tn),Ue===!0&&nt.setGlobalState(this.clippingPlanes,O),k!==null&&dt.render(T.state.shadowsArray,K,O);let q=new Set;return b.traverse(function(Z){if(!(Z.isMesh||Z.isPoints||Z.isLine||Z.isSprite))return;let wt=Z.material;if(wt)if(Array.isArray(wt))for(let Ct=0;Ct<wt.length;Ct++){let Et=wt[Ct];ao(Et,K,O,Z),q.add(Et)}else ao(wt,K,O,Z),q.add(wt)}),T=E.pop(),k!==null&&k.renderEnd(),q},this.compileAsync=function(b,O,K=null){let q=this.compile(b,O,K);return new Promise(Z=>{function wt(){if(q.forEach(function(Ct){let Pt=kt.get(Ct).currentProgram;(Pt===void 0||Pt.isReady())&&q.delete(Ct)}),q.size===0){Z(b);return}setTimeout(wt,10)}Xt.get("KHR_parallel_shader_compile")!==null?wt():setTimeout(wt,10)})};let nr=null;function Dc(b){nr&&nr(b)}function fa(){Hi.stop()}function Pi(){Hi.start()}let Hi=new bm;Hi.setAnimationLoop(Dc),typeof self<"u"&&Hi.setContext(self),this.setAnimationLoop=function(b){nr=b,at.setAnimationLoop(b),b===null?Hi.stop():Hi.start()},at.addEventListener("sessionstart",fa),at.addEventListener("sessionend",Pi),this.render=function(b,O){if(O!==void 0&&O.isCamera!==!0){jt("WebGLRenderer.render: camera is not an instance of THREE.Camera.");return}if(D===!0)return;k!==null&&k.renderStart(b,O);let K=at.enabled===!0&&at.isPresenting===!0,q=B!==null&&(lt===null||K)&&B.begin(N,lt);if(b.matrixWorldAutoUpdate===!0&&b.updateMatrixWorld(),O.parent===null&&O.matrixWorldAutoUpdate===!0&&O.updateMatrixWorld(),at.enabled===!0&&at.isPresenting===!0&&(B===null||B.isCompositing()===!1)&&(at.cameraAutoUpdate===!0&&at.updateCamera(O),O=at.getCamera()),b.isScene===!0&&b.onBeforeRender(N,b,O,lt),T=tt.get(b,E.length),T.init(O),T.state.textureUnits=Wt.getTextureUnits(),E.push(T),Pe.multiplyMatrices(O.projectionMatrix,O.matrixWorldInverse),O.isArrayCamera?He.setFromArrayCamera(O):te.setFromProjectionMatrix(Pe,ui,O.reversedDepth),tn=this.localClippingEnabled,Ue=nt.init(this.clippingPlanes,tn),P=xt.get(b,_.length),P.init(),_.push(P),this.info.render.frame++,at.enabled===!0&&at.isPresenting===!0){let Ct=N.xr.getDepthSensingMesh();Ct!==null&&Wi(Ct,O,-1/0,N.sortObjects)}Wi(b,O,0,N.sortObjects),P.finish(),k!==null&&k.updateLights(T.state.lightsArray),N.sortObjects===!0&&P.sort(Gt,ne),Ye=at.enabled===!1||at.isPresenting===!1||at.hasDepthSensing()===!1,Ye&&U.addToRenderList(P,b),this.info.autoReset===!0&&this.info.reset(),Ue===!0&&nt.beginShadows();let Z=T.state.shadowsArray;if(dt.render(Z,b,O),Ue===!0&&nt.endShadows(),(q&&B.hasRenderPass())===!1){let Ct=P.opaque,Et=P.transmissive;if(T.setupLights(),O.isArrayCamera){let Pt=O.cameras;if(Et.length>0)for(let Bt=0,Kt=Pt.length;Bt<Kt;Bt++){let he=Pt[Bt];_i(Ct,Et,b,he)}Ye&&U.render(b);for(let Bt=0,Kt=Pt.length;Bt<Kt;Bt++){let he=Pt[Bt];lo(P,b,he,he.viewport)}}else Et.length>0&&_i(Ct,Et,b,O),Ye&&U.render(b),lo(P,b,O)}lt!==null&&V===0&&(Wt.updateMultisampleRenderTarget(lt),Wt.updateRenderTargetMipmap(lt)),q&&B.end(N),b.isScene===!0&&b.onAfterRender(N,b,O),vt.resetDefaultState(),J=-1,j=null,E.pop(),E.length>0?(T=E[E.length-1],Wt.setTextureUnits(T.state.textureUnits),Ue===!0&&nt.setGlobalState(N.clippingPlanes,T.state.camera)):T=null,_.pop(),_.length>0?P=_[_.length-1]:P=null,k!==null&&k.renderEnd()};function Wi(b,O,K,q){if(b.visible===!1)return;if(b.layers.test(O.layers)){if(b.isGroup)K=b.renderOrder;else if(b.isLOD)b.autoUpdate===!0&&b.update(O);else if(b.isLight)T.pushLight(b),b.castShadow&&T.pushShadow(b);else if(b.isSprite){let Ct=O.isArrayCamera?He:te;if(!b.frustumCulled||b.intersectsFrustum(Ct)){q&&_e.setFromMatrixPosition(b.matrixWorld).applyMatrix4(Pe);let Et=ct.update(b),Pt=b.material;Pt.visible&&P.push(b,Et,Pt,K,_e.z,null,O)}}else if(b.isMesh||b.isLine||b.isPoints){let Ct=O.isArrayCamera?He:te;if(!b.frustumCulled||b.intersectsFrustum(Ct)){let Et=ct.update(b),Pt=b.material;if(q&&(b.boundingSphere!==void 0?(b.boundingSphere===null&&b.computeBoundingSphere(),_e.copy(b.boundingSphere.center)):(Et.boundingSphere===null&&Et.computeBoundingSphere(),_e.copy(Et.boundingSphere.center)),_e.applyMatrix4(b.matrixWorld).applyMatrix4(Pe)),Array.isArray(Pt)){let Bt=Et.groups;for(let Kt=0,he=Bt.length;Kt<he;Kt++){let Ot=Bt[Kt],ue=Pt[Ot.materialIndex];ue&&ue.visible&&P.push(b,Et,ue,K,_e.z,Ot,O)}}else Pt.visible&&P.push(b,Et,Pt,K,_e.z,null,O)}}}let wt=b.children;for(let Ct=0,Et=wt.length;Ct<Et;Ct++)Wi(wt[Ct],O,K,q)}function lo(b,O,K,q){let{opaque:Z,transmissive:wt,transparent:Ct}=b;T.setupLightsView(K),Ue===!0&&nt.setGlobalState(N.clippingPlanes,K),q&&Mt.viewport(it.copy(q)),Z.length>0&&Ze(Z,O,K),wt.length>0&&Ze(wt,O,K),Ct.length>0&&Ze(Ct,O,K),Mt.buffers.depth.setTest(!0),Mt.buffers.depth.setMask(!0),Mt.buffers.color.setMask(!0),Mt.setPolygonOffset(!1)}function _i(b,O,K,q){if((K.isScene===!0?K.overrideMaterial:null)!==null)return;if(T.state.transmissionRenderTarget[q.id]===void 0){let Ot=Xt.has("EXT_color_buffer_half_float")||Xt.has("EXT_color_buffer_float");T.state.transmissionRenderTarget[q.id]=new Vn(1,1,{generateMipmaps:!0,type:Ot?Ri:Xn,minFilter:rs,samples:Math.max(4,ie.samples),stencilBuffer:r,resolveDepthBuffer:!1,resolveStencilBuffer:!1,storeMultisampledDepthBuffer:!1,storeMultisampledStencilBuffer:!1,colorSpace:ge.workingColorSpace})}let wt=T.state.transmissionRenderTarget[q.id],Ct=q.viewport||it;wt.setSize(Ct.z*N.transmissionResolutionScale,Ct.w*N.transmissionResolutionScale);let Et=N.getRenderTarget(),Pt=N.getActiveCubeFace(),Bt=N.getActiveMipmapLevel();N.setRenderTarget(wt),N.getClearColor(Q),pt=N.getClearAlpha(),pt<1&&N.setClearColor(16777215,.5),N.clear(),Ye&&U.render(K);let Kt=N.toneMapping;N.toneMapping=zi;let he=q.viewport;if(q.viewport!==void 0&&(q.viewport=void 0),T.setupLightsView(q),Ue===!0&&nt.setGlobalState(N.clippingPlanes,q),Ze(b,K,q),Wt.updateMultisampleRenderTarget(wt),Wt.updateRenderTargetMipmap(wt),Xt.has("WEBGL_multisampled_render_to_texture")===!1){let Ot=!1;for(let ue=0,qe=O.length;ue<qe;ue++){let Ae=O[ue],{object:Re,geometry:hn,material:Nt,group:nn}=Ae;if(Nt.side===mi&&Re.layers.test(q.layers)){let pe=Nt.side;Nt.side=Gn,Nt.needsUpdate=!0,je(Re,K,q,hn,Nt,nn),Nt.side=pe,Nt.needsUpdate=!0,Ot=!0}}Ot===!0&&(Wt.updateMultisampleRenderTarget(wt),Wt.updateRenderTargetMipmap(wt))}N.setRenderTarget(Et,Pt,Bt),N.setClearColor(Q,pt),he!==void 0&&(q.viewport=he),N.toneMapping=Kt}function Ze(b,O,K){let q=O.isScene===!0?O.overrideMaterial:null;for(let Z=0,wt=b.length;Z<wt;Z++){let Ct=b[Z],{object:Et,geometry:Pt,group:Bt}=Ct,Kt=Ct.material;Kt.allowOverride===!0&&q!==null&&(Kt=q),Et.layers.test(K.layers)&&je(Et,O,K,Pt,Kt,Bt)}}function je(b,O,K,q,Z,wt){k!==null&&Z.isNodeMaterial&&k.setObject(b,Z),b.onBeforeRender(N,O,K,q,Z,wt),b.modelViewMatrix.multiplyMatrices(K.matrixWorldInverse,b.matrixWorld),b.normalMatrix.getNormalMatrix(b.modelViewMatrix),Z.onBeforeRender(N,O,K,q,b,wt),Z.transparent===!0&&Z.side===mi&&Z.forceSinglePass===!1?(Z.side=Gn,Z.needsUpdate=!0,N.renderBufferDirect(K,O,q,Z,b,wt),Z.side=Is,Z.needsUpdate=!0,N.renderBufferDirect(K,O,q,Z,b,wt),Z.side=mi):N.renderBufferDirect(K,O,q,Z,b,wt),b.onAfterRender(N,O,K,q,Z,wt)}function Qe(b){let O=0;for(let K of b)K.texture!==null&&O++;return O}function Ii(b,O,K){O.isScene!==!0&&(O=cn);let q=kt.get(b),Z=T.state.lights,wt=T.state.shadowsArray,Ct=Z.state.version,Et=rt.getParameters(b,Z.state,wt,O,K,T.state.lightProbeGridArray),Pt=rt.getProgramCacheKey(Et),Bt=q.programs;q.environment=b.isMeshStandardMaterial||b.isMeshLambertMaterial||b.isMeshPhongMaterial?O.environment:null,q.fog=O.fog;let Kt=b.isMeshStandardMaterial||b.isMeshLambertMaterial&&!b.envMap||b.isMeshPhongMaterial&&!b.envMap;q.envMap=A.get(b.envMap||q.environment,Kt),q.envMapRotation=q.environment!==null&&b.envMap===null?O.environmentRotation:b.envMapRotation,Bt===void 0&&(b.addEventListener("dispose",se),Bt=new Map,q.programs=Bt,q.programVariants=new Map);let he=Bt.get(Pt);if(he!==void 0){if(q.currentProgram===he&&q.lightsStateVersion===Ct)return co(b,Et),he}else Et.uniforms=rt.getUniforms(b),k!==null&&b.isNodeMaterial&&k.build(b,K,Et),b.onBeforeCompile(Et,N),he=rt.acquireProgram(Et,Pt),Bt.set(Pt,he),q.uniforms=Et.uniforms;let Ot=q.uniforms;return(!b.isShaderMaterial&&!b.isRawShaderMaterial||b.clipping===!0)&&(Ot.clippingPlanes=nt.uniform),co(b,Et),q.needsLights=cs(b),q.lightsStateVersion=Ct,q.needsLights&&(Ot.ambientLightColor.value=Z.state.ambient,Ot.lightProbe.value=Z.state.probe,Ot.sunLights.value=Z.state.sun,Ot.sunLightShadows.value=Z.state.sunShadow,Ot.directionalLights.value=Z.state.directional,Ot.directionalLightShadows.value=Z.state.directionalShadow,Ot.spotLights.value=Z.state.spot,Ot.spotLightShadows.value=Z.state.spotShadow,Ot.rectAreaLights.value=Z.state.rectArea,Ot.ltc_1.value=Z.state.rectAreaLTC1,Ot.ltc_2.value=Z.state.rectAreaLTC2,Ot.pointLights.value=Z.state.point,Ot.pointLightShadows.value=Z.state.pointShadow,Ot.hemisphereLights.value=Z.state.hemi,Ot.sunShadowMatrix.value=Z.state.sunShadowMatrix,Ot.sunShadowCascade.value=Z.state.sunShadowCascade,Ot.directionalShadowMatrix.value=Z.state.directionalShadowMatrix,Ot.spotLightMatrix.value=Z.state.spotLightMatrix,Ot.spotLightMap.value=Z.state.spotLightMap,Ot.pointShadowMatrix.value=Z.state.pointShadowMatrix),q.numLightProbeGrids=Qe(T.state.lightProbeGridArray),q.currentProgram=he,q.uniformsList=null,he}function Yn(b,O,K,q,Z){let wt=kt.get(b),Ct=wt.currentProgram.id+","+q+","+Z,Et=wt.programVariants.get(Ct);return Et===void 0?(Et=Ii(b,O,K),wt.programVariants.set(Ct,Et)):(wt.currentProgram=Et,wt.uniformsList=null,wt.outputColorSpace=q,wt.toneMapping=Z),Et}function ls(b){if(b.uniformsList===null){let O=b.currentProgram.getUniforms();b.uniformsList=so.seqWithValue(O.seq,b.uniforms)}return b.uniformsList}function co(b,O){let K=kt.get(b);K.outputColorSpace=O.outputColorSpace,K.batching=O.batching,K.batchingColor=O.batchingColor,K.instancing=O.instancing,K.instancingColor=O.instancingColor,K.instancingMorph=O.instancingMorph,K.skinning=O.skinning,K.morphTargets=O.morphTargets,K.morphNormals=O.morphNormals,K.morphColors=O.morphColors,K.morphTargetsCount=O.morphTargetsCount,K.numClippingPlanes=O.numClippingPlanes,K.numIntersection=O.numClipIntersection,K.vertexAlphas=O.vertexAlphas,K.vertexTangents=O.vertexTangents,K.toneMapping=O.toneMapping}function ho(b,O,K,q,Z){O.isScene!==!0&&(O=cn),Wt.resetTextureUnits();let wt=O.fog,Ct=q.isMeshStandardMaterial||q.isMeshLambertMaterial||q.isMeshPhongMaterial?O.environment:null,Et=lt===null?N.outputColorSpace:lt.isXRRenderTarget===!0?lt.texture.colorSpace:ge.workingColorSpace,Pt=q.isMeshStandardMaterial||q.isMeshLambertMaterial&&!q.envMap||q.isMeshPhongMaterial&&!q.envMap,Bt=A.get(q.envMap||Ct,Pt),Kt=q.vertexColors===!0&&!!K.attributes.color&&K.attributes.color.itemSize===4,he=!!K.attributes.tangent&&(!!q.normalMap||q.anisotropy>0),Ot=!!K.morphAttributes.position,ue=!!K.morphAttributes.normal,qe=!!K.morphAttributes.color,Ae=zi;q.toneMapped&&(lt===null||lt.isXRRenderTarget===!0)&&(Ae=N.toneMapping);let Re=K.morphAttributes.position||K.morphAttributes.normal||K.morphAttributes.color,hn=Re!==void 0?Re.length:0,Nt=kt.get(q),nn=T.state.lights;if(Ue===!0&&(tn===!0||b!==j)){let Ce=b===j&&q.id===J;nt.setState(q,b,Ce)}let pe=!1,Xi=!1;q.version===Nt.__version?Nt.needsLights&&Nt.lightsStateVersion!==nn.state.version||Z.isBatchedMesh&&Nt.batching===!1||!Z.isBatchedMesh&&Nt.batching===!0||Z.isBatchedMesh&&Nt.batchingColor===!0&&Z._colorsTexture===null||Z.isBatchedMesh&&Nt.batchingColor===!1&&Z._colorsTexture!==null||Z.isInstancedMesh&&Nt.instancing===!1||!Z.isInstancedMesh&&Nt.instancing===!0||Z.isSkinnedMesh&&Nt.skinning===!1||!Z.isSkinnedMesh&&Nt.skinning===!0||Z.isInstancedMesh&&Nt.instancingColor===!0&&Z.instanceColor===null||Z.isInstancedMesh&&Nt.instancingColor===!1&&Z.instanceColor!==null||Z.isInstancedMesh&&Nt.instancingMorph===!0&&Z.morphTexture===null||Z.isInstancedMesh&&Nt.instancingMorph===!1&&Z.morphTexture!==null||Nt.envMap!==Bt||q.fog===!0&&Nt.fog!==wt||Nt.numClippingPlanes!==void 0&&(Nt.numClippingPlanes!==nt.numPlanes||Nt.numIntersection!==nt.numIntersection)||Nt.vertexAlphas!==Kt||Nt.vertexTangents!==he||Nt.morphTargets!==Ot||Nt.morphNormals!==ue||Nt.morphColors!==qe||Nt.morphTargetsCount!==hn||Nt.numLightProbeGrids!==Qe(T.state.lightProbeGridArray)?pe=!0:(Nt.outputColorSpace!==Et||Nt.toneMapping!==Ae)&&(Xi=!0):(pe=!0,Nt.__version=q.version);let sn=Nt.currentProgram;(pe===!0||Xi===!0)&&(sn=Xi===!0?Yn(q,O,Z,Et,Ae):Ii(q,O,Z),k&&q.isNodeMaterial&&k.onUpdateProgram(q,sn,Nt));let rr=!1,Li=!1,qi=!1,oe=sn.getUniforms(),$e=Nt.uniforms;if(Mt.useProgram(sn.program)&&(rr=!0,Li=!0,qi=!0),q.id!==J&&(J=q.id,Li=!0),rr||j!==b){Mt.buffers.depth.getReversed()&&b.reversedDepth!==!0&&(b._reversedDepth=!0,b.updateProjectionMatrix()),oe.setValue(F,"projectionMatrix",b.projectionMatrix),oe.setValue(F,"viewMatrix",b.matrixWorldInverse);let rn=oe.map.cameraPosition;rn!==void 0&&rn.setValue(F,_n.setFromMatrixPosition(b.matrixWorld)),ie.logarithmicDepthBuffer&&oe.setValue(F,"logDepthBufFC",2/(Math.log(b.far+1)/Math.LN2)),(q.isMeshPhongMaterial||q.isMeshToonMaterial||q.isMeshLambertMaterial||q.isMeshBasicMaterial||q.isMeshStandardMaterial||q.isShaderMaterial)&&oe.setValue(F,"isOrthographic",b.isOrthographicCamera===!0),j!==b&&(j=b,Li=!0,qi=!0)}if(Nt.needsLights&&(nn.state.sunShadowMap.length>0&&oe.setValue(F,"sunShadowMap",nn.state.sunShadowMap,Wt),nn.state.directionalShadowMap.length>0&&oe.setValue(F,"directionalShadowMap",nn.state.directionalShadowMap,Wt),nn.state.spotShadowMap.length>0&&oe.setValue(F,"spotShadowMap",nn.state.spotShadowMap,Wt),nn.state.pointShadowMap.length>0&&oe.setValue(F,"pointShadowMap",nn.state.pointShadowMap,Wt)),Z.isSkinnedMesh){oe.setOptional(F,Z,"bindMatrix"),oe.setOptional(F,Z,"bindMatrixInverse");let Ce=Z.skeleton;Ce&&(Ce.boneTexture===null&&Ce.computeBoneTexture(),oe.setValue(F,"boneTexture",Ce.boneTexture,Wt))}Z.isBatchedMesh&&(oe.setOptional(F,Z,"batchingTexture"),oe.setValue(F,"batchingTexture",Z._matricesTexture,Wt),oe.setOptional(F,Z,"batchingIdTexture"),oe.setValue(F,"batchingIdTexture",Z._indirectTexture,Wt),oe.setOptional(F,Z,"batchingColorTexture"),Z._colorsTexture!==null&&oe.setValue(F,"batchingColorTexture",Z._colorsTexture,Wt));let Nn=K.morphAttributes;if((Nn.position!==void 0||Nn.normal!==void 0||Nn.color!==void 0)&&st.update(Z,K,sn),(Li||Nt.receiveShadow!==Z.receiveShadow)&&(Nt.receiveShadow=Z.receiveShadow,oe.setValue(F,"receiveShadow",Z.receiveShadow)),(q.isMeshStandardMaterial||q.isMeshLambertMaterial||q.isMeshPhongMaterial)&&q.envMap===null&&O.environment!==null&&($e.envMapIntensity.value=O.environmentIntensity),$e.dfgLUT!==void 0&&($e.dfgLUT.value=XM()),Li){if(oe.setValue(F,"toneMappingExposure",N.toneMappingExposure),Nt.needsLights&&ir($e,qi),wt&&q.fog===!0&&gt.refreshFogUniforms($e,wt),gt.refreshMaterialUniforms($e,q,St,Tt,T.state.transmissionRenderTarget[b.id]),Nt.needsLights&&Nt.numLightProbeGrids>0){let Ce=M,rn=0;for(let Tn of T.state.lightProbeGridArray)Tn.texture!==null&&(Ce.textures[rn]=Tn.texture,Ce.min[rn]=Tn.boundingBox.min,Ce.max[rn]=Tn.boundingBox.max,Ce.resolution[rn]=Tn.resolution,rn++);for(let Tn in Ce)Ce[Tn].length=rn;$e.probesSH.value=Ce.textures,$e.probesMin.value=Ce.min,$e.probesMax.value=Ce.max,$e.probesResolution.value=Ce.resolution}so.upload(F,ls(Nt),$e,Wt)}if(q.isShaderMaterial&&q.uniformsNeedUpdate===!0&&(so.upload(F,ls(Nt),$e,Wt),q.uniformsNeedUpdate=!1),q.isSpriteMaterial&&oe.setValue(F,"center",Z.center),oe.setValue(F,"modelViewMatrix",Z.modelViewMatrix),oe.setValue(F,"normalMatrix",Z.normalMatrix),oe.setValue(F,"modelMatrix",Z.matrixWorld),q.uniformsGroups!==void 0){let Ce=q.uniformsGroups;for(let rn=0,Tn=Ce.length;rn<Tn;rn++){let da=Ce[rn];Vt.update(da,sn),Vt.bind(da,sn)}}return sn}function ir(b,O){b.ambientLightColor.needsUpdate=O,b.lightProbe.needsUpdate=O,b.sunLights.needsUpdate=O,b.sunLightShadows.needsUpdate=O,b.directionalLights.needsUpdate=O,b.directionalLightShadows.needsUpdate=O,b.pointLights.needsUpdate=O,b.pointLightShadows.needsUpdate=O,b.spotLights.needsUpdate=O,b.spotLightShadows.needsUpdate=O,b.rectAreaLights.needsUpdate=O,b.hemisphereLights.needsUpdate=O}function cs(b){return b.isMeshLambertMaterial||b.isMeshToonMaterial||b.isMeshPhongMaterial||b.isMeshStandardMaterial||b.isShadowMaterial||b.isShaderMaterial&&b.lights===!0}this.getActiveCubeFace=function(){return Y},this.getActiveMipmapLevel=function(){return V},this.getRenderTarget=function(){return lt},this.setRenderTargetTextures=function(b,O,K){let q=kt.get(b);q.__autoAllocateDepthBuffer=b.resolveDepthBuffer===!1,q.__autoAllocateDepthBuffer===!1&&(q.__useRenderToTexture=!1),kt.get(b.texture).__webglTexture=O,kt.get(b.depthTexture).__webglTexture=q.__autoAllocateDepthBuffer?void 0:K,q.__hasExternalTextures=!0},this.setRenderTargetFramebuffer=function(b,O){let K=kt.get(b);K.__webglFramebuffer=O,K.__useDefaultFramebuffer=O===void 0},this.setRenderTarget=function(b,O=0,K=0){lt=b,Y=O,V=K;let q=null,Z=!1,wt=!1;if(b){let Et=kt.get(b);if(Et.__useDefaultFramebuffer!==void 0){Mt.bindFramebuffer(F.FRAMEBUFFER,Et.__webglFramebuffer),it.copy(b.viewport),ut.copy(b.scissor),ht=b.scissorTest,Mt.viewport(it),Mt.scissor(ut),Mt.setScissorTest(ht),J=-1;return}else if(Et.__webglFramebuffer===void 0)Wt.setupRenderTarget(b);else if(Et.__hasExternalTextures)Wt.rebindTextures(b,kt.get(b.texture).__webglTexture,kt.get(b.depthTexture).__webglTexture);else if(b.depthBuffer){let Kt=b.depthTexture;if(Et.__boundDepthTexture!==Kt){if(Kt!==null&&kt.has(Kt)&&(b.width!==Kt.image.width||b.height!==Kt.image.height))throw new Error("THREE.WebGLRenderer: Attached DepthTexture is initialized to the incorrect size.");Wt.setupDepthRenderbuffer(b)}}let Pt=b.texture;(Pt.isData3DTexture||Pt.isDataArrayTexture||Pt.isCompressedArrayTexture)&&(wt=!0);let Bt=kt.get(b).__webglFramebuffer;b.isWebGLCubeRenderTarget?(Array.isArray(Bt[O])?q=Bt[O][K]:q=Bt[O],Z=!0):b.samples>0&&Wt.useMultisampledRTT(b)===!1?q=kt.get(b).__webglMultisampledFramebuffer:Array.isArray(Bt)?q=Bt[K]:q=Bt,it.copy(b.viewport),ut.copy(b.scissor),ht=b.scissorTest}else it.copy(zt).multiplyScalar(St).floor(),ut.copy(ce).multiplyScalar(St).floor(),ht=re;if(K!==0&&(q=G),Mt.bindFramebuffer(F.FRAMEBUFFER,q)&&Mt.drawBuffers(b,q),Mt.viewport(it),Mt.scissor(ut),Mt.setScissorTest(ht),Z){let Et=kt.get(b.texture);F.framebufferTexture2D(F.FRAMEBUFFER,F.COLOR_ATTACHMENT0,F.TEXTURE_CUBE_MAP_POSITIVE_X+O,Et.__webglTexture,K)}else if(wt){let Et=O;for(let Pt=0;Pt<b.textures.length;Pt++){let Bt=kt.get(b.textures[Pt]);F.framebufferTextureLayer(F.FRAMEBUFFER,F.COLOR_ATTACHMENT0+Pt,Bt.__webglTexture,K,Et)}}else if(b!==null&&K!==0){let Et=kt.get(b.texture);F.framebufferTexture2D(F.FRAMEBUFFER,F.COLOR_ATTACHMENT0,F.TEXTURE_2D,Et.__webglTexture,K)}J=-1};function sr(b){let O=kt.get(b);return(O.__readFormat!==b.format||O.__readType!==b.type)&&(O.__readFormat=b.format,O.__readType=b.type,O.__formatReadable=ie.textureFormatReadable(b.format),O.__typeReadable=ie.textureTypeReadable(b.type)),O}this.readRenderTargetPixels=function(b,O,K,q,Z,wt,Ct,Et=0){if(!(b&&b.isWebGLRenderTarget)){jt("WebGLRenderer.readRenderTargetPixels: renderTarget is not THREE.WebGLRenderTarget.");return}let Pt=kt.get(b).__webglFramebuffer;if(b.isWebGLCubeRenderTarget&&Ct!==void 0&&(Pt=Pt[Ct],Array.isArray(Pt)&&(Pt=Pt[0])),Pt){Mt.bindFramebuffer(F.FRAMEBUFFER,Pt);try{let Bt=b.textures[Et],Kt=Bt.format,he=Bt.type;b.textures.length>1&&F.readBuffer(F.COLOR_ATTACHMENT0+Et);let Ot=sr(Bt);if(Ot.__formatReadable===!1){jt("WebGLRenderer.readRenderTargetPixels: renderTarget is not in RGBA or implementation defined format.");return}if(Ot.__typeReadable===!1){jt("WebGLRenderer.readRenderTargetPixels: renderTarget is not in UnsignedByteType or implementation defined type.");return}O>=0&&O<=b.width-q&&K>=0&&K<=b.height-Z&&F.readPixels(O,K,q,Z,mt.convert(Kt),mt.convert(he),wt)}finally{let Bt=lt!==null?kt.get(lt).__webglFramebuffer:null;Mt.bindFramebuffer(F.FRAMEBUFFER,Bt)}}},this.readRenderTargetPixelsAsync=async function(b,O,K,q,Z,wt,Ct,Et=0){if(!(b&&b.isWebGLRenderTarget))throw new Error("THREE.WebGLRenderer.readRenderTargetPixels: renderTarget is not THREE.WebGLRenderTarget.");let Pt=kt.get(b).__webglFramebuffer;if(b.isWebGLCubeRenderTarget&&Ct!==void 0&&(Pt=Pt[Ct],Array.isArray(Pt)&&(Pt=Pt[0])),Pt)if(O>=0&&O<=b.width-q&&K>=0&&K<=b.height-Z){Mt.bindFramebuffer(F.FRAMEBUFFER,Pt);let Bt=b.textures[Et],Kt=Bt.format,he=Bt.type;b.textures.length>1&&F.readBuffer(F.COLOR_ATTACHMENT0+Et);let Ot=sr(Bt);if(Ot.__formatReadable===!1)throw new Error("THREE.WebGLRenderer.readRenderTargetPixelsAsync: renderTarget is not in RGBA or implementation defined format.");if(Ot.__typeReadable===!1)throw new Error("THREE.WebGLRenderer.readRenderTargetPixelsAsync: renderTarget is not in UnsignedByteType or implementation defined type.");let ue=F.createBuffer();F.bindBuffer(F.PIXEL_PACK_BUFFER,ue),F.bufferData(F.PIXEL_PACK_BUFFER,wt.byteLength,F.STREAM_READ),F.readPixels(O,K,q,Z,mt.convert(Kt),mt.convert(he),0),F.bindBuffer(F.PIXEL_PACK_BUFFER,null);let qe=lt!==null?kt.get(lt).__webglFramebuffer:null;Mt.bindFramebuffer(F.FRAMEBUFFER,qe);let Ae=F.fenceSync(F.SYNC_GPU_COMMANDS_COMPLETE,0);return F.flush(),await Zp(F,Ae,4),F.bindBuffer(F.PIXEL_PACK_BUFFER,ue),F.getBufferSubData(F.PIXEL_PACK_BUFFER,0,wt),F.bindBuffer(F.PIXEL_PACK_BUFFER,null),F.deleteBuffer(ue),F.deleteSync(Ae),wt}else throw new Error("THREE.WebGLRenderer.readRenderTargetPixelsAsync: requested read bounds are out of range.")},this.copyFramebufferToTexture=function(b,O=null,K=0){let q=Math.pow(2,-K),Z=Math.floor(b.image.width*q),wt=Math.floor(b.image.height*q),Ct=O!==null?O.x:0,Et=O!==null?O.y:0;Wt.setTexture2D(b,0),F.copyTexSubImage2D(F.TEXTURE_2D,K,0,0,Ct,Et,Z,wt),Mt.unbindTexture()},this.copyTextureToTexture=function(b,O,K=null,q=null,Z=0,wt=0){let Ct,Et,Pt,Bt,Kt,he,Ot,ue,qe,Ae=b.isCompressedTexture?b.mipmaps[wt]:b.image;if(K!==null)Ct=K.max.x-K.min.x,Et=K.max.y-K.min.y,Pt=K.isBox3?K.max.z-K.min.z:1,Bt=K.min.x,Kt=K.min.y,he=K.isBox3?K.min.z:0;else{let oe=Math.pow(2,-Z);Ct=Math.floor(Ae.width*oe),Et=Math.floor(Ae.height*oe),b.isDataArrayTexture?Pt=Ae.depth:b.isData3DTexture?Pt=Math.floor(Ae.depth*oe):Pt=1,Bt=0,Kt=0,he=0}q!==null?(Ot=q.x,ue=q.y,qe=q.z):(Ot=0,ue=0,qe=0);let Re=mt.convert(O.format),hn=mt.convert(O.type),Nt;O.isData3DTexture?(Wt.setTexture3D(O,0),Nt=F.TEXTURE_3D):O.isDataArrayTexture||O.isCompressedArrayTexture?(Wt.setTexture2DArray(O,0),Nt=F.TEXTURE_2D_ARRAY):(Wt.setTexture2D(O,0),Nt=F.TEXTURE_2D),Mt.activeTexture(F.TEXTURE0),Mt.pixelStorei(F.UNPACK_FLIP_Y_WEBGL,O.flipY),Mt.pixelStorei(F.UNPACK_PREMULTIPLY_ALPHA_WEBGL,O.premultiplyAlpha),Mt.pixelStorei(F.UNPACK_ALIGNMENT,O.unpackAlignment);let nn=Mt.getParameter(F.UNPACK_ROW_LENGTH),pe=Mt.getParameter(F.UNPACK_IMAGE_HEIGHT),Xi=Mt.getParameter(F.UNPACK_SKIP_PIXELS),sn=Mt.getParameter(F.UNPACK_SKIP_ROWS),rr=Mt.getParameter(F.UNPACK_SKIP_IMAGES);Mt.pixelStorei(F.UNPACK_ROW_LENGTH,Ae.width),Mt.pixelStorei(F.UNPACK_IMAGE_HEIGHT,Ae.height),Mt.pixelStorei(F.UNPACK_SKIP_PIXELS,Bt),Mt.pixelStorei(F.UNPACK_SKIP_ROWS,Kt),Mt.pixelStorei(F.UNPACK_SKIP_IMAGES,he);let Li=b.isDataArrayTexture||b.isData3DTexture,qi=O.isDataArrayTexture||O.isData3DTexture;if(b.isDepthTexture){let oe=kt.get(b),$e=kt.get(O),Nn=kt.get(oe.__renderTarget),Ce=kt.get($e.__renderTarget);Mt.bindFramebuffer(F.READ_FRAMEBUFFER,Nn.__webglFramebuffer),Mt.bindFramebuffer(F.DRAW_FRAMEBUFFER,Ce.__webglFramebuffer);for(let rn=0;rn<Pt;rn++)Li&&(F.framebufferTextureLayer(F.READ_FRAMEBUFFER,F.COLOR_ATTACHMENT0,kt.get(b).__webglTexture,Z,he+rn),F.framebufferTextureLayer(F.DRAW_FRAMEBUFFER,F.COLOR_ATTACHMENT0,kt.get(O).__webglTexture,wt,qe+rn)),F.blitFramebuffer(Bt,Kt,Bt+Ct,Kt+Et,Ot,ue,Ot+Ct,ue+Et,F.DEPTH_BUFFER_BIT,F.NEAREST);Mt.bindFramebuffer(F.READ_FRAMEBUFFER,null),Mt.bindFramebuffer(F.DRAW_FRAMEBUFFER,null)}else if(Z!==0||b.isRenderTargetTexture||kt.has(b)){let oe=kt.get(b),$e=kt.get(O);Mt.bindFramebuffer(F.READ_FRAMEBUFFER,L),Mt.bindFramebuffer(F.DRAW_FRAMEBUFFER,H);for(let Nn=0;Nn<Pt;Nn++)Li?F.framebufferTextureLayer(F.READ_FRAMEBUFFER,F.COLOR_ATTACHMENT0,oe.__webglTexture,Z,he+Nn):F.framebufferTexture2D(F.READ_FRAMEBUFFER,F.COLOR_ATTACHMENT0,F.TEXTURE_2D,oe.__webglTexture,Z),qi?F.framebufferTextureLayer(F.DRAW_FRAMEBUFFER,F.COLOR_ATTACHMENT0,$e.__webglTexture,wt,qe+Nn):F.framebufferTexture2D(F.DRAW_FRAMEBUFFER,F.COLOR_ATTACHMENT0,F.TEXTURE_2D,$e.__webglTexture,wt),Z!==0?F.blitFramebuffer(Bt,Kt,Bt+Ct,Kt+Et,Ot,ue,Ot+Ct,ue+Et,F.COLOR_BUFFER_BIT,F.NEAREST):qi?F.copyTexSubImage3D(Nt,wt,Ot,ue,qe+Nn,Bt,Kt,Ct,Et):F.copyTexSubImage2D(Nt,wt,Ot,ue,Bt,Kt,Ct,Et);Mt.bindFramebuffer(F.READ_FRAMEBUFFER,null),Mt.bindFramebuffer(F.DRAW_FRAMEBUFFER,null)}else qi?b.isDataTexture||b.isData3DTexture?F.texSubImage3D(Nt,wt,Ot,ue,qe,Ct,Et,Pt,Re,hn,Ae.data):O.isCompressedArrayTexture?F.compressedTexSubImage3D(Nt,wt,Ot,ue,qe,Ct,Et,Pt,Re,Ae.data):F.texSubImage3D(Nt,wt,Ot,ue,qe,Ct,Et,Pt,Re,hn,Ae):b.isDataTexture?F.texSubImage2D(F.TEXTURE_2D,wt,Ot,ue,Ct,Et,Re,hn,Ae.data):b.isCompressedTexture?F.compressedTexSubImage2D(F.TEXTURE_2D,wt,Ot,ue,Ae.width,Ae.height,Re,Ae.data):F.texSubImage2D(F.TEXTURE_2D,wt,Ot,ue,Ct,Et,Re,hn,Ae);Mt.pixelStorei(F.UNPACK_ROW_LENGTH,nn),Mt.pixelStorei(F.UNPACK_IMAGE_HEIGHT,pe),Mt.pixelStorei(F.UNPACK_SKIP_PIXELS,Xi),Mt.pixelStorei(F.UNPACK_SKIP_ROWS,sn),Mt.pixelStorei(F.UNPACK_SKIP_IMAGES,rr),wt===0&&O.generateMipmaps===!0&&O.mipmapsAutoUpdate===!0&&F.generateMipmap(Nt),Mt.unbindTexture()},this.initRenderTarget=function(b){kt.get(b).__webglFramebuffer===void 0&&Wt.setupRenderTarget(b)},this.initTexture=function(b){b.isCubeTexture?Wt.setTextureCube(b,0):b.isData3DTexture?Wt.setTexture3D(b,0):b.isDataArrayTexture||b.isCompressedArrayTexture?Wt.setTexture2DArray(b,0):Wt.setTexture2D(b,0),Mt.unbindTexture()},this.resetState=function(){Y=0,V=0,lt=null,Mt.reset(),vt.reset()},typeof __THREE_DEVTOOLS__<"u"&&__THREE_DEVTOOLS__.dispatchEvent(new CustomEvent("observe",{detail:this}))}get coordinateSystem(){return ui}get outputColorSpace(){return this._outputColorSpace}set outputColorSpace(t){this._outputColorSpace=t;let e=this.getContext();e.drawingBufferColorSpace=ge._getDrawingBufferColorSpace(t),e.unpackColorSpace=ge._getUnpackColorSpace()}};var Um={type:"change"},Gu={type:"start"},Om={type:"end"},Rc=new qr,Fm=new si,qM=Math.cos(70*Tu.DEG2RAD),gn=new W,qn=2*Math.PI,we={NONE:-1,ROTATE:0,DOLLY:1,PAN:2,TOUCH_ROTATE:3,TOUCH_PAN:4,TOUCH_DOLLY_PAN:5,TOUCH_DOLLY_ROTATE:6},Vu=1e-6,Cc=class extends Qo{constructor(t,e=null){super(t,e),this.state=we.NONE,this.target=new W,this.cursor=new W,this.minDistance=0,this.maxDistance=1/0,this.minZoom=0,this.maxZoom=1/0,this.minTargetRadius=0,this.maxTargetRadius=1/0,this.minPolarAngle=0,this.maxPolarAngle=Math.PI,this.minAzimuthAngle=-1/0,this.maxAzimuthAngle=1/0,this.enableDamping=!1,this.dampingFactor=.05,this.enableZoom=!0,this.zoomSpeed=1,this.enableRotate=!0,this.rotateSpeed=1,this.keyRotateSpeed=1,this.enablePan=!0,this.panSpeed=1,this.screenSpacePanning=!0,this.keyPanSpeed=7,this.zoomToCursor=!1,this.autoRotate=!1,this.autoRotateSpeed=2,this.keys={LEFT:"ArrowLeft",UP:"ArrowUp",RIGHT:"ArrowRight",BOTTOM:"ArrowDown"},this.mouseButtons={LEFT:Cs.ROTATE,MIDDLE:Cs.DOLLY,RIGHT:Cs.PAN},this.touches={ONE:Ps.ROTATE,TWO:Ps.DOLLY_PAN},this.target0=this.target.clone(),this.position0=this.object.position.clone(),this.zoom0=this.object.zoom,this._cursorStyle="auto",this._domElementKeyEvents=null,this._lastPosition=new W,this._lastQuaternion=new Cn,this._lastTargetPosition=new W,this._quat=new Cn().setFromUnitVectors(t.up,new W(0,1,0)),this._quatInverse=this._quat.clone().invert(),this._spherical=new jr,this._sphericalDelta=new jr,this._scale=1,this._panOffset=new W,this._rotateStart=new Jt,this._rotateEnd=new Jt,this._rotateDelta=new Jt,this._panStart=new Jt,this._panEnd=new Jt,this._panDelta=new Jt,this._dollyStart=new Jt,this._dollyEnd=new Jt,this._dollyDelta=new Jt,this._dollyDirection=new W,this._mouse=new Jt,this._performCursorZoom=!1,this._pointers=[],this._pointerPositions={},this._controlActive=!1,this._onPointerMove=ZM.bind(this),this._onPointerDown=YM.bind(this),this._onPointerUp=$M.bind(this),this._onContextMenu=nb.bind(this),this._onMouseWheel=jM.bind(this),this._onKeyDown=QM.bind(this),this._onTouchStart=tb.bind(this),this._onTouchMove=eb.bind(this),this._onMouseDown=JM.bind(this),this._onMouseMove=KM.bind(this),this._interceptControlDown=ib.bind(this),this._interceptControlUp=sb.bind(this),this.domElement!==null&&this.connect(this.domElement),this.update()}set cursorStyle(t){this._cursorStyle=t,t==="grab"?this.domElement.style.cursor="grab":this.domElement.style.cursor="auto"}get cursorStyle(){return this._cursorStyle}connect(t){super.connect(t),this.domElement.addEventListener("pointerdown",this._onPointerDown),this.domElement.addEventListener("pointercancel",this._onPointerUp),this.domElement.addEventListener("contextmenu",this._onContextMenu),this.domElement.addEventListener("wheel",this._onMouseWheel,{passive:!1}),this.domElement.ownerDocument.addEventListener("keydown",this._interceptControlDown,{passive:!0,capture:!0}),this.domElement.style.touchAction="none"}disconnect(){this.state=we.NONE,this.domElement.removeEventListener("pointerdown",this._onPointerDown),this.domElement.ownerDocument.removeEventListener("pointermove",this._onPointerMove),this.domElement.ownerDocument.removeEventListener("pointerup",this._onPointerUp),this.domElement.removeEventListener("pointercancel",this._onPointerUp),this.domElement.removeEventListener("wheel",this._onMouseWheel),this.domElement.removeEventListener("contextmenu",this._onContextMenu),this.stopListenToKeyEvents(),this.domElement.ownerDocument.removeEventListener("keydown",this._interceptControlDown,{capture:!0}),this.domElement.ownerDocument.removeEventListener("keyup",this._interceptControlUp,{capture:!0}),this._controlActive=!1,this._pointers.length=0,this._pointerPositions={},this.domElement.style.touchAction="",this.domElement.style.cursor="auto"}dispose(){this.disconnect()}getPolarAngle(){return this._spherical.phi}getAzimuthalAngle(){return this._spherical.theta}getDistance(){return this.object.position.distanceTo(this.target)}listenToKeyEvents(t){t.addEventListener("keydown",this._onKeyDown),this._domElementKeyEvents=t}stopListenToKeyEvents(){this._domElementKeyEvents!==null&&(this._domElementKeyEvents.removeEventListener("keydown",this._onKeyDown),this._domElementKeyEvents=null)}saveState(){this.target0.copy(this.target),this.position0.copy(this.object.position),this.zoom0=this.object.zoom}reset(){this.target.copy(this.target0),this.object.position.copy(this.position0),this.object.zoom=this.zoom0,this.object.updateProjectionMatrix(),this.dispatchEvent(Um),this.update(),this.state=we.NONE}pan(t,e){this._pan(t,e),this.update()}dollyIn(t){this._dollyIn(t),this.update()}dollyOut(t){this._dollyOut(t),this.update()}rotateLeft(t){this._rotateLeft(t),this.update()}rotateUp(t){this._rotateUp(t),this.update()}update(t=null){let e=this.object.position;gn.copy(e).sub(this.target),gn.applyQuaternion(this._quat),this._spherical.setFromVector3(gn),this.autoRotate&&this.state===we.NONE&&this._rotateLeft(this._getAutoRotationAngle(t)),this.enableDamping?(this._spherical.theta+=this._sphericalDelta.theta*this.dampingFactor,this._spherical.phi+=this._sphericalDelta.phi*this.dampingFactor):(this._spherical.theta+=this._sphericalDelta.theta,this._spherical.phi+=this._sphericalDelta.phi);let n=this.minAzimuthAngle,s=this.maxAzimuthAngle;isFinite(n)&&isFinite(s)&&(n<-Math.PI?n+=qn:n>Math.PI&&(n-=qn),s<-Math.PI?s+=qn:s>Math.PI&&(s-=qn),n<=s?this._spherical.theta=Math.max(n,Math.min(s,this._spherical.theta)):this._spherical.theta=this._spherical.theta>(n+s)/2?Math.max(n,this._spherical.theta):Math.min(s,this._spherical.theta)),this._spherical.phi=Math.max(this.minPolarAngle,Math.min(this.maxPolarAngle,this._spherical.phi)),this._spherical.makeSafe(),this.enableDamping===!0?this.target.addScaledVector(this._panOffset,this.dampingFactor):this.target.add(this._panOffset),this.target.sub(this.cursor),this.target.clampLength(this.minTargetRadius,this.maxTargetRadius),this.target.add(this.cursor);let r=!1;if(this.zoomToCursor&&this._performCursorZoom||this.object.isOrthographicCamera)this._spherical.radius=this._clampDistance(this._spherical.radius);else{let o=this._spherical.radius;this._spherical.radius=this._clampDistance(this._spherical.radius*this._scale),r=o!=this._spherical.radius}if(gn.setFromSpherical(this._spherical),gn.applyQuaternion(this._quatInverse),e.copy(this.target).add(gn),this.object.lookAt(this.target),this.enableDamping===!0?(this._sphericalDelta.theta*=1-this.dampingFactor,this._sphericalDelta.phi*=1-this.dampingFactor,this._panOffset.multiplyScalar(1-this.dampingFactor)):(this._sphericalDelta.set(0,0,0),this._panOffset.set(0,0,0)),this.zoomToCursor&&this._performCursorZoom){let o=null;if(this.object.isPerspectiveCamera){let a=gn.length();o=this._clampDistance(a*this._scale);let l=a-o;this.object.position.addScaledVector(this._dollyDirection,l),this.object.updateMatrixWorld(),r=!!l}else if(this.object.isOrthographicCamera){let a=new W(this._mouse.x,this._mouse.y,0);a.unproject(this.object);let l=this.object.zoom;this.object.zoom=Math.max(this.minZoom,Math.min(this.maxZoom,this.object.zoom/this._scale)),this.object.updateProjectionMatrix(),r=l!==this.object.zoom;let c=new W(this._mouse.x,this._mouse.y,0);c.unproject(this.object),this.object.position.sub(c).add(a),this.object.updateMatrixWorld(),o=gn.length()}else console.warn("WARNING: OrbitControls.js encountered an unknown camera type - zoom to cursor disabled."),this.zoomToCursor=!1;o!==null&&(this.screenSpacePanning?this.target.set(0,0,-1).transformDirection(this.object.matrix).multiplyScalar(o).add(this.object.position):(Rc.origin.copy(this.object.position),Rc.direction.set(0,0,-1).transformDirection(this.object.matrix),Math.abs(this.object.up.dot(Rc.direction))<qM?this.object.lookAt(this.target):(Fm.setFromNormalAndCoplanarPoint(this.object.up,this.target),Rc.intersectPlane(Fm,this.target))))}else if(this.object.isOrthographicCamera){let o=this.object.zoom;this.object.zoom=Math.max(this.minZoom,Math.min(this.maxZoom,this.object.zoom/this._scale)),o!==this.object.zoom&&(this.object.updateProjectionMatrix(),r=!0)}return this._scale=1,this._performCursorZoom=!1,r||this._lastPosition.distanceToSquared(this.object.position)>Vu||8*(1-this._lastQuaternion.dot(this.object.quaternion))>Vu||this._lastTargetPosition.distanceToSquared(this.target)>Vu?(this.dispatchEvent(Um),this._lastPosition.copy(this.object.position),this._lastQuaternion.copy(this.object.quaternion),this._lastTargetPosition.copy(this.target),!0):!1}_getAutoRotationAngle(t){return t!==null?qn/60*this.autoRotateSpeed*t:qn/60/60*this.autoRotateSpeed}_getZoomScale(t){let e=Math.abs(t*.01);return Math.pow(.95,this.zoomSpeed*e)}_rotateLeft(t){this._sphericalDelta.theta-=t}_rotateUp(t){this._sphericalDelta.phi-=t}_panLeft(t,e){gn.setFromMatrixColumn(e,0),gn.multiplyScalar(-t),this._panOffset.add(gn)}_panUp(t,e){this.screenSpacePanning===!0?gn.setFromMatrixColumn(e,1):(gn.setFromMatrixColumn(e,0),gn.crossVectors(this.object.up,gn)),gn.multiplyScalar(t),this._panOffset.add(gn)}_pan(t,e){let n=this.domElement;if(this.object.isPerspectiveCamera){let s=this.object.position;gn.copy(s).sub(this.target);let r=gn.length();r*=Math.tan(this.object.fov/2*Math.PI/180),this._panLeft(2*t*r/n.clientHeight,this.object.matrix),this._panUp(2*e*r/n.clientHeight,this.object.matrix)}else this.object.isOrthographicCamera?(this._panLeft(t*(this.object.right-this.object.left)/this.object.zoom/n.clientWidth,this.object.matrix),this._panUp(e*(this.object.top-this.object.bottom)/this.object.zoom/n.clientHeight,this.object.matrix)):(console.warn("WARNING: OrbitControls.js encountered an unknown camera type - pan disabled."),this.enablePan=!1)}_dollyOut(t){this.object.isPerspectiveCamera||this.object.isOrthographicCamera?this._scale/=t:(console.warn("WARNING: OrbitControls.js encountered an unknown camera type - dolly/zoom disabled."),this.enableZoom=!1)}_dollyIn(t){this.object.isPerspectiveCamera||this.object.isOrthographicCamera?this._scale*=t:(console.warn("WARNING: OrbitControls.js encountered an unknown camera type - dolly/zoom disabled."),this.enableZoom=!1)}_updateZoomParameters(t,e){if(!this.zoomToCursor)return;this._performCursorZoom=!0;let n=this.domElement.getBoundingClientRect(),s=t-n.left,r=e-n.top,o=n.width,a=n.height;this._mouse.x=s/o*2-1,this._mouse.y=-(r/a)*2+1,this._dollyDirection.set(this._mouse.x,this._mouse.y,1).unproject(this.object).sub(this.object.position).normalize()}_clampDistance(t){return Math.max(this.minDistance,Math.min(this.maxDistance,t))}_handleMouseDownRotate(t){this._rotateStart.set(t.clientX,t.clientY)}_handleMouseDownDolly(t){this._updateZoomParameters(t.clientX,t.clientY),this._dollyStart.set(t.clientX,t.clientY)}_handleMouseDownPan(t){this._panStart.set(t.clientX,t.clientY)}_handleMouseMoveRotate(t){this._rotateEnd.set(t.clientX,t.clientY),this._rotateDelta.subVectors(this._rotateEnd,this._rotateStart).multiplyScalar(this.rotateSpeed);let e=this.domElement;this._rotateLeft(qn*this._rotateDelta.x/e.clientHeight),this._rotateUp(qn*this._rotateDelta.y/e.clientHeight),this._rotateStart.copy(this._rotateEnd),this.update()}_handleMouseMoveDolly(t){this._dollyEnd.set(t.clientX,t.clientY),this._dollyDelta.subVectors(this._dollyEnd,this._dollyStart),this._dollyDelta.y>0?this._dollyOut(this._getZoomScale(this._dollyDelta.y)):this._dollyDelta.y<0&&this._dollyIn(this._getZoomScale(this._dollyDelta.y)),this._dollyStart.copy(this._dollyEnd),this.zoomToCursor&&(this._performCursorZoom=!0,this._dollyDirection.set(this._mouse.x,this._mouse.y,1).unproject(this.object).sub(this.object.position).normalize()),this.update()}_handleMouseMovePan(t){this._panEnd.set(t.clientX,t.clientY),this._panDelta.subVectors(this._panEnd,this._panStart).multiplyScalar(this.panSpeed),this._pan(this._panDelta.x,this._panDelta.y),this._panStart.copy(this._panEnd),this.update()}_handleMouseWheel(t){this._updateZoomParameters(t.clientX,t.clientY),t.deltaY<0?this._dollyIn(this._getZoomScale(t.deltaY)):t.deltaY>0&&this._dollyOut(this._getZoomScale(t.deltaY)),this.update()}_handleKeyDown(t){let e=!1;switch(t.code){case this.keys.UP:t.ctrlKey||t.metaKey||t.shiftKey?this.enableRotate&&this._rotateUp(qn*this.keyRotateSpeed/this.domElement.clientHeight):this.enablePan&&this._pan(0,this.keyPanSpeed),e=!0;break;case this.keys.BOTTOM:t.ctrlKey||t.metaKey||t.shiftKey?this.enableRotate&&this._rotateUp(-qn*this.keyRotateSpeed/this.domElement.clientHeight):this.enablePan&&this._pan(0,-this.keyPanSpeed),e=!0;break;case this.keys.LEFT:t.ctrlKey||t.metaKey||t.shiftKey?this.enableRotate&&this._rotateLeft(qn*this.keyRotateSpeed/this.domElement.clientHeight):this.enablePan&&this._pan(this.keyPanSpeed,0),e=!0;break;case this.keys.RIGHT:t.ctrlKey||t.metaKey||t.shiftKey?this.enableRotate&&this._rotateLeft(-qn*this.keyRotateSpeed/this.domElement.clientHeight):this.enablePan&&this._pan(-this.keyPanSpeed,0),e=!0;break}e&&(t.preventDefault(),this.update())}_handleTouchStartRotate(t){if(this._pointers.length===1)this._rotateStart.set(t.pageX,t.pageY);else{let e=this._getSecondPointerPosition(t),n=.5*(t.pageX+e.x),s=.5*(t.pageY+e.y);this._rotateStart.set(n,s)}}_handleTouchStartPan(t){if(this._pointers.length===1)this._panStart.set(t.pageX,t.pageY);else{let e=this._getSecondPointerPosition(t),n=.5*(t.pageX+e.x),s=.5*(t.pageY+e.y);this._panStart.set(n,s)}}_handleTouchStartDolly(t){let e=this._getSecondPointerPosition(t),n=t.pageX-e.x,s=t.pageY-e.y,r=Math.sqrt(n*n+s*s);this._dollyStart.set(0,r)}_handleTouchStartDollyPan(t){this.enableZoom&&this._handleTouchStartDolly(t),this.enablePan&&this._handleTouchStartPan(t)}_handleTouchStartDollyRotate(t){this.enableZoom&&this._handleTouchStartDolly(t),this.enableRotate&&this._handleTouchStartRotate(t)}_handleTouchMoveRotate(t){if(this._pointers.length==1)this._rotateEnd.set(t.pageX,t.pageY);else{let n=this._getSecondPointerPosition(t),s=.5*(t.pageX+n.x),r=.5*(t.pageY+n.y);this._rotateEnd.set(s,r)}this._rotateDelta.subVectors(this._rotateEnd,this._rotateStart).multiplyScalar(this.rotateSpeed);let e=this.domElement;this._rotateLeft(qn*this._rotateDelta.x/e.clientHeight),this._rotateUp(qn*this._rotateDelta.y/e.clientHeight),this._rotateStart.copy(this._rotateEnd)}_handleTouchMovePan(t){if(this._pointers.length===1)this._panEnd.set(t.pageX,t.pageY);else{let e=this._getSecondPointerPosition(t),n=.5*(t.pageX+e.x),s=.5*(t.pageY+e.y);this._panEnd.set(n,s)}this._panDelta.subVectors(this._panEnd,this._panStart).multiplyScalar(this.panSpeed),this._pan(this._panDelta.x,this._panDelta.y),this._panStart.copy(this._panEnd)}_handleTouchMoveDolly(t){let e=this._getSecondPointerPosition(t),n=t.pageX-e.x,s=t.pageY-e.y,r=Math.sqrt(n*n+s*s);this._dollyEnd.set(0,r),this._dollyDelta.set(0,Math.pow(this._dollyEnd.y/this._dollyStart.y,this.zoomSpeed)),this._dollyOut(this._dollyDelta.y),this._dollyStart.copy(this._dollyEnd);let o=(t.pageX+e.x)*.5,a=(t.pageY+e.y)*.5;this._updateZoomParameters(o,a)}_handleTouchMoveDollyPan(t){this.enableZoom&&this._handleTouchMoveDolly(t),this.enablePan&&this._handleTouchMovePan(t)}_handleTouchMoveDollyRotate(t){this.enableZoom&&this._handleTouchMoveDolly(t),this.enableRotate&&this._handleTouchMoveRotate(t)}_addPointer(t){this._pointers.push(t.pointerId)}_removePointer(t){delete this._pointerPositions[t.pointerId];for(let e=0;e<this._pointers.length;e++)if(this._pointers[e]==t.pointerId){this._pointers.splice(e,1);return}}_isTrackingPointer(t){for(let e=0;e<this._pointers.length;e++)if(this._pointers[e]==t.pointerId)return!0;return!1}_trackPointer(t){let e=this._pointerPositions[t.pointerId];e===void 0&&(e=new Jt,this._pointerPositions[t.pointerId]=e),e.set(t.pageX,t.pageY)}_getSecondPointerPosition(t){let e=t.pointerId===this._pointers[0]?this._pointers[1]:this._pointers[0];return this._pointerPositions[e]}_customWheelEvent(t){let e=t.deltaMode,n={clientX:t.clientX,clientY:t.clientY,deltaY:t.deltaY};switch(e){case 1:n.deltaY*=16;break;case 2:n.deltaY*=100;break}return t.ctrlKey&&!this._controlActive&&(n.deltaY*=10),n}};function YM(i){this.enabled!==!1&&(this._pointers.length===0&&(this.domElement.setPointerCapture(i.pointerId),this.domElement.ownerDocument.addEventListener("pointermove",this._onPointerMove),this.domElement.ownerDocument.addEventListener("pointerup",this._onPointerUp)),!this._isTrackingPointer(i)&&(this._addPointer(i),i.pointerType==="touch"?this._onTouchStart(i):this._onMouseDown(i),this._cursorStyle==="grab"&&(this.domElement.style.cursor="grabbing")))}function ZM(i){this.enabled!==!1&&(i.pointerType==="touch"?this._onTouchMove(i):this._onMouseMove(i))}function $M(i){switch(this._removePointer(i),this._pointers.length){case 0:this.domElement.releasePointerCapture(i.pointerId),this.domElement.ownerDocument.removeEventListener("pointermove",this._onPointerMove),this.domElement.ownerDocument.removeEventListener("pointerup",this._onPointerUp),this.dispatchEvent(Om),this.state=we.NONE,this._cursorStyle==="grab"&&(this.domElement.style.cursor="grab");break;case 1:let t=this._pointers[0],e=this._pointerPositions[t];this._onTouchStart({pointerId:t,pageX:e.x,pageY:e.y});break}}function JM(i){let t;switch(i.button){case 0:t=this.mouseButtons.LEFT;break;case 1:t=this.mouseButtons.MIDDLE;break;case 2:t=this.mouseButtons.RIGHT;break;default:t=-1}switch(t){case Cs.DOLLY:if(this.enableZoom===!1)return;this._handleMouseDownDolly(i),this.state=we.DOLLY;break;case Cs.ROTATE:if(i.ctrlKey||i.metaKey||i.shiftKey){if(this.enablePan===!1)return;this._handleMouseDownPan(i),this.state=we.PAN}else{if(this.enableRotate===!1)return;this._handleMouseDownRotate(i),this.state=we.ROTATE}break;case Cs.PAN:if(i.ctrlKey||i.metaKey||i.shiftKey){if(this.enableRotate===!1)return;this._handleMouseDownRotate(i),this.state=we.ROTATE}else{if(this.enablePan===!1)return;this._handleMouseDownPan(i),this.state=we.PAN}break;default:this.state=we.NONE}this.state!==we.NONE&&this.dispatchEvent(Gu)}function KM(i){switch(this.state){case we.ROTATE:if(this.enableRotate===!1)return;this._handleMouseMoveRotate(i);break;case we.DOLLY:if(this.enableZoom===!1)return;this._handleMouseMoveDolly(i);break;case we.PAN:if(this.enablePan===!1)return;this._handleMouseMovePan(i);break}}function jM(i){this.enabled===!1||this.enableZoom===!1||this.state!==we.NONE||(i.preventDefault(),this.dispatchEvent(Gu),this._handleMouseWheel(this._customWheelEvent(i)),this.dispatchEvent(Om))}function QM(i){this.enabled!==!1&&this._handleKeyDown(i)}function tb(i){switch(this._trackPointer(i),this._pointers.length){case 1:switch(this.touches.ONE){case Ps.ROTATE:if(this.enableRotate===!1){this.state=we.NONE;break}this._handleTouchStartRotate(i),this.state=we.TOUCH_ROTATE;break;case Ps.PAN:if(this.enablePan===!1){this.state=we.NONE;break}this._handleTouchStartPan(i),this.state=we.TOUCH_PAN;break;default:this.state=we.NONE}break;case 2:switch(this.touches.TWO){case Ps.DOLLY_PAN:if(this.enableZoom===!1&&this.enablePan===!1)return;this._handleTouchStartDollyPan(i),this.state=we.TOUCH_DOLLY_PAN;break;case Ps.DOLLY_ROTATE:if(this.enableZoom===!1&&this.enableRotate===!1)return;this._handleTouchStartDollyRotate(i),this.state=we.TOUCH_DOLLY_ROTATE;break;default:this.state=we.NONE}break;default:this.state=we.NONE}this.state!==we.NONE&&this.dispatchEvent(Gu)}function eb(i){switch(this._trackPointer(i),this.state){case we.TOUCH_ROTATE:if(this.enableRotate===!1)return;this._handleTouchMoveRotate(i),this.update();break;case we.TOUCH_PAN:if(this.enablePan===!1)return;this._handleTouchMovePan(i),this.update();break;case we.TOUCH_DOLLY_PAN:if(this.enableZoom===!1&&this.enablePan===!1)return;this._handleTouchMoveDollyPan(i),this.update();break;case we.TOUCH_DOLLY_ROTATE:if(this.enableZoom===!1&&this.enableRotate===!1)return;this._handleTouchMoveDollyRotate(i),this.update();break;default:this.state=we.NONE}}function nb(i){this.enabled!==!1&&i.preventDefault()}function ib(i){i.key==="Control"&&(this._controlActive=!0,this.domElement.ownerDocument.addEventListener("keyup",this._interceptControlUp,{passive:!0,capture:!0}))}function sb(i){i.key==="Control"&&(this._controlActive=!1,this.domElement.ownerDocument.removeEventListener("keyup",this._interceptControlUp,{passive:!0,capture:!0}))}var Hu=256,rb=`
varying vec3 place;
void main() {
  vec4 world = modelMatrix * vec4(position, 1.0);
  place = world.xyz;
  gl_Position = projectionMatrix * viewMatrix * world;
}`,ob=`
uniform sampler2D shadow;
uniform vec3 first, second, centre, lines, dark;
uniform float reach, half_width, strength;
varying vec3 place;
float line(vec2 at, float spacing, float thick) {
  vec2 cells = at / spacing;
  vec2 away = abs(fract(cells - 0.5) - 0.5) / fwidth(cells);
  return 1.0 - clamp(min(away.x, away.y) - thick, 0.0, 1.0);
}
void main() {
  vec2 at = vec2(dot(place, first), dot(place, second));
  vec2 off = at - vec2(dot(centre, first), dot(centre, second));
  float fade = 1.0 - smoothstep(0.25 * reach, reach, length(off));
  float grid = max(0.35 * line(at, 0.25, 0.0), 0.8 * line(at, 1.0, 0.3));
  float covered = 0.0;
  vec2 middle = 0.5 + 0.5 * off / half_width;
  for (int i = -3; i <= 3; i++) {
    for (int j = -3; j <= 3; j++) {
      covered += texture2D(shadow, middle + vec2(float(i), float(j)) * 1.4 / ${Hu}.0).r;
    }
  }
  covered *= strength / 49.0;
  float inside = step(max(abs(middle.x - 0.5), abs(middle.y - 0.5)), 0.5);
  covered *= inside;
  float opacity = max(grid * fade, covered);
  gl_FragColor = vec4(mix(lines, dark, covered / max(opacity, 1e-4)), opacity);
}`,Pc=class{constructor(t,e,n,s,r){this.renderer=t,this.up=n,this.height=s,this.reach=Math.max(2.2*r,.6),this.half=.75*r,this.first=new W(Math.abs(n.z),Math.abs(n.x),Math.abs(n.y)),this.second=new W().crossVectors(n,this.first),this.target=new Vn(Hu,Hu),this.above=new Js(-this.half,this.half,this.half,-this.half,0,8*r),this.black=new Yr({color:16777215}),this.shadows=new Ys,this.material=new pi({vertexShader:rb,fragmentShader:ob,transparent:!0,depthWrite:!1,side:mi,uniforms:{shadow:{value:this.target.texture},first:{value:this.first},second:{value:this.second},centre:{value:new W},lines:{value:new ae},dark:{value:new ae},reach:{value:this.reach},half_width:{value:this.half},strength:{value:.5}}}),this.plane=new In(new Zs(2*this.reach,2*this.reach),this.material),this.plane.renderOrder=-1,this.plane.frustumCulled=!1,this.plane.quaternion.setFromRotationMatrix(new Se().makeBasis(this.first,this.second,n)),e.add(this.plane)}paint(){let{lines:t,dark:e,strength:n}=this.material.uniforms;t.value.set(xe("grid")).convertLinearToSRGB(),e.value.set(xe("shadow")).convertLinearToSRGB(),n.value=Number(xe("shadow-strength"))}draw(t,e,n){let s=n.clone();s.addScaledVector(this.up,this.height-s.dot(this.up)),this.plane.position.copy(s),this.material.uniforms.centre.value.copy(s),this.above.up.copy(this.second),this.above.position.copy(s).addScaledVector(this.up,7*this.half),this.above.lookAt(s),this.shadows.overrideMaterial=this.black;let r=t.map(a=>a.parent),o=t.map(a=>a.visible);for(let a of t)a.visible=a.posed&&e,this.shadows.add(a);this.renderer.setRenderTarget(this.target),this.renderer.setClearColor(0,1),this.renderer.clear(),this.renderer.render(this.shadows,this.above),this.renderer.setRenderTarget(null),this.renderer.setClearColor(0,0),t.forEach((a,l)=>{r[l].add(a),a.visible=o[l]})}};var Bm=.0056,km=24,ab=.04,lb=24,cb=.4,hb={oblique:[38,11],front:[0,4],right:[90,4],back:[180,4],left:[270,4],top:[0,89]};function Gm(){try{return!!document.createElement("canvas").getContext("webgl2")}catch{return!1}}var Lc=class{constructor(t,e,n){Object.assign(this,{trial:t,clock:e,box:n}),this.times=3,this.shown={bones:!0,glass:!1,sticks:!1,measured:!0,fitted:!0,residuals:!0},this.follow=!0,this.renderer=new Ec({antialias:!0,alpha:!0,preserveDrawingBuffer:!0}),n.prepend(this.renderer.domElement),this.scene=new Ys,this.up=new W(...t.up),this.forward=new W(...t.forward),this.#e(),this.#t(),this.#r(),this.#s(),this.floor=new Pc(this.renderer,this.scene,this.up,t.floor,this.span),this.#o(),this.labels=[...Array(3)].map(()=>{let s=document.createElement("div");return s.className="label",n.append(s),s}),ps(()=>{this.#a(),this.change()}),this.#a(),e.on("row",()=>this.change()),e.on("markers",()=>this.change()),new ResizeObserver(()=>this.#l()).observe(n),this.#l(),this.look("oblique")}set(t,e){this.shown[t]=e,this.change()}lengthen(t){this.times=t,this.change()}change(){this.waiting||(this.waiting=!0,requestAnimationFrame(()=>{this.waiting=!1,this.#c()}))}look(t){let[e,n]=hb[t].map(c=>c*Math.PI/180),s=new W().crossVectors(this.forward,this.up),r=this.forward.clone().multiplyScalar(Math.cos(e));r.addScaledVector(s,Math.sin(e));let o=r.multiplyScalar(Math.cos(n)).addScaledVector(this.up,Math.sin(n)),a=Math.min(1,this.camera.aspect),l=.55*this.span/Math.tan(km*Math.PI/360)/a;this.target=this.#n(this.clock.row),this.controls.target.copy(this.target),this.camera.position.copy(this.target).addScaledVector(o,l),this.controls.update(),this.change()}#e(){this.scene.add(new Jo(16777215,10134708,2)),this.lamp=new jo(16777215,1.9),this.scene.add(this.lamp,this.lamp.target)}#t(){let{trial:t}=this,{origin:e}=t.arrays;this.span=.3;for(let r=0;r<t.rows;r+=Math.max(1,Math.floor(t.rows/20))){let o=new fi;for(let a of[t.arrays.fitted,e])for(let l=0;l<a.length/3;l++){let c=dr(a,l,r);c.every(Number.isFinite)&&o.expandByPoint(new W(...c))}o.isEmpty()||(this.span=Math.max(this.span*.999,o.getSize(new W).length()))}let n=t.rows>1?(t.rows-1)/(t.time[t.rows-1]-t.time[0]):1,s=Math.round(cb*n);this.path=[0,1,2].map(r=>ub(this.#i(r),s))}#i(t){let{trial:e}=this,n=[...e.arrays.origin,...e.arrays.fitted],s=new Float64Array(e.rows),r=0;for(let o=0;o<e.rows;o++){let a=1/0,l=-1/0;for(let c=t;c<n.length;c+=3){let f=n[c][o];f<a&&(a=f),f>l&&(l=f)}r=a<=l?(a+l)/2:r,s[o]=r}return s}#n(t){return new W(...this.path.map(e=>e[t]))}#r(){let{trial:t}=this;this.bones=t.segments.map((s,r)=>{let o=t.arrays[`bone points ${r}`],a=t.arrays[`bone faces ${r}`],l=new di;l.setAttribute("position",new Hn(fb(o),3));let c=new Uint32Array(3*a[0].length);for(let u=0;u<a[0].length;u++){let h=a[0][u];c.set([h,h+a[1][u],h+a[2][u]],3*u)}l.setIndex(new Hn(c,1)),l.computeVertexNormals();let f=new In(l,new $s);return f.matrixAutoUpdate=!1,f.frustumCulled=!1,f.side=s.side||"middle",this.scene.add(f),f});let e=t.sticks.length,n=new Jr(1,1,1,8);this.sticks=new Zr(n,new $s,Math.max(e,1)),this.sticks.frustumCulled=!1,this.scene.add(this.sticks)}#s(){let t=Math.max(this.trial.markers.length,1),e=new Yo(1,16,12),n=new Jr(1,1,1,8),s=(r,o)=>{let a=new Zr(r,new $s,t);return a.frustumCulled=!1,a.paint=o,this.scene.add(a),a};this.measured=s(e,"measured"),this.fitted=s(e,"fitted"),this.leftOut=s(e,"left-out"),this.residuals=s(n,"look"),this.picked=s(e,"look"),this.picked.material.transparent=!0,this.picked.material.opacity=.35,this.picked.material.depthWrite=!1}#o(){this.camera=new kn(km,1,.02*this.span,60*this.span),this.camera.up.copy(this.up),this.controls=new Cc(this.camera,this.renderer.domElement),this.controls.minDistance=.2*this.span,this.controls.maxDistance=12*this.span,this.controls.addEventListener("change",()=>this.change()),this.controls.listenToKeyEvents=()=>{}}#a(){for(let t of this.bones)t.material.color.set(xe(`bone-${t.side}`));this.sticks.material.color.set(xe("stick"));for(let t of[this.measured,this.fitted,this.leftOut,this.residuals,this.picked])t.material.color.set(xe(t.paint));this.floor.paint()}#l(){let{clientWidth:t,clientHeight:e}=this.box;!t||!e||(this.renderer.setPixelRatio(Math.min(devicePixelRatio||1,2)),this.renderer.setSize(t,e,!1),this.camera.aspect=t/e,this.camera.updateProjectionMatrix(),this.change())}#c(){let{row:t}=this.clock;if(this.follow){let e=this.#n(t),n=e.clone().sub(this.target);this.target.copy(e),this.camera.position.add(n),this.controls.target.add(n)}this.#h(t),this.#u(t),this.#f(),this.floor.draw(this.bones,this.shown.bones,this.#n(t)),this.renderer.render(this.scene,this.camera),this.#d(t)}#h(t){let{origin:e,turn:n}=this.trial.arrays,s=new W(1,1,1);this.bones.forEach((o,a)=>{let[l,c,f,u]=dr(n,a,t,4);if(o.posed=Number.isFinite(l),o.visible=o.posed&&this.shown.bones,!o.posed)return;let h=new W(...dr(e,a,t));o.matrix.compose(h,new Cn(c,f,u,l).normalize(),s),o.matrixWorldNeedsUpdate=!0,o.material.transparent=this.shown.glass,o.material.opacity=this.shown.glass?.35:1,o.material.depthWrite=!this.shown.glass});let r=0;for(let[o,...a]of this.trial.sticks){if(!this.bones[o].posed)continue;let[l,c]=[a.slice(0,3),a.slice(3)].map(f=>new W(...f).applyMatrix4(this.bones[o].matrix));this.sticks.setMatrixAt(r++,Vm(l,c,.5*Bm*this.span))}oo(this.sticks,r,this.shown.sticks)}#u(t){let{arrays:e,markers:n,used:s}=this.trial,r=Bm*this.span,o={measured:0,fitted:0,leftOut:0,residuals:0,picked:0};this.places=n.map((a,l)=>{let c=zm(dr(e.fitted,l,t)),f=zm(dr(e.measured,l,t));e.why_not[l][t]===s&&c&&f?(f=c.clone().addScaledVector(f.clone().sub(c),this.times),this.residuals.setMatrixAt(o.residuals++,Vm(c,f,.34*r)),this.measured.setMatrixAt(o.measured++,Ic(f,r))):f&&this.leftOut.setMatrixAt(o.leftOut++,Ic(f,r)),c&&this.fitted.setMatrixAt(o.fitted++,Ic(c,.85*r));let h=f??c;return h&&this.clock.markers.includes(a)&&this.picked.setMatrixAt(o.picked++,Ic(h,2.4*r)),h}),oo(this.measured,o.measured,this.shown.measured),oo(this.leftOut,o.leftOut,this.shown.measured),oo(this.fitted,o.fitted,this.shown.fitted),oo(this.residuals,o.residuals,this.shown.residuals),oo(this.picked,o.picked,!0)}#f(){let t=this.camera.position.clone().sub(this.controls.target).normalize(),e=new W().crossVectors(this.up,t);this.lamp.target.position.copy(this.controls.target),this.lamp.position.copy(this.controls.target),this.lamp.position.addScaledVector(t,1).addScaledVector(this.up,1.2).addScaledVector(e,-.8),this.lamp.target.updateMatrixWorld()}#d(t){let{markers:e,arrays:n}=this.trial,s=this.clock.markers.map(a=>e.indexOf(a)).filter(a=>a>=0),r=go(this.trial,t);r>=0&&n.error[r][t]>ab&&!s.includes(r)&&s.push(r);let o=[];this.labels.forEach((a,l)=>{let c=s[l]===void 0?void 0:this.places[s[l]];if(a.hidden=!c,!c)return;let f=c.clone().project(this.camera),u=n.error[s[l]][t],h=Number.isFinite(u)?` ${(1e3*u).toFixed(0)} mm`:"";a.textContent=e[s[l]]+h;let p=(f.x+1)/2*this.box.clientWidth,x=(1-f.y)/2*this.box.clientHeight;for(;o.some(m=>Math.abs(m-x)<lb);)x+=1;o.push(x);let w=p>.75*this.box.clientWidth;a.style.transform=`translate(${p+(w?-12:12)}px, ${x-9}px) translateX(${w?-100:0}%)`})}};function ub(i,t){let e=new Float64Array(i.length+1);for(let n=0;n<i.length;n++)e[n+1]=e[n]+i[n];return i.map((n,s)=>{let r=Math.min(t,s,i.length-1-s);return(e[s+r+1]-e[s-r])/(2*r+1)})}function fb(i){let t=new Float32Array(3*i[0].length);for(let e=0;e<i[0].length;e++)for(let n=0;n<3;n++)t[3*e+n]=i[n][e];return t}var zm=i=>i.every(Number.isFinite)?new W(...i):void 0;function Ic(i,t){return new Se().makeScale(t,t,t).setPosition(i)}var db=new W(0,1,0);function Vm(i,t,e){let n=t.clone().sub(i),s=Math.max(n.length(),1e-6),r=new Cn().setFromUnitVectors(db,n.divideScalar(s)),o=i.clone().add(t).multiplyScalar(.5);return new Se().compose(o,r,new W(e,s,e))}function oo(i,t,e){i.count=t,i.visible=e&&t>0,i.instanceMatrix.needsUpdate=!0}var Fe=i=>document.getElementById(i);async function pb(){let i=await uf(),t=new ga(i),e=new Na(i,t);mb(i,t),new _a(i,t,Fe("error-map"),Fe("error-told"),Fe("error-order")),new Da(i,t,Fe("marker-line"),Fe("marker-names")),gb(i,e),xb(i,e),yb(i,t),Sb(i,t),Mb(i,t),_b(),Gm()?wb(i,t):bb(),document.body.classList.add("alive")}function mb(i,t){let e=i.findings.find(r=>r.level==="look"&&r.places.length)?.places[0],n=0;i.rms.forEach((r,o)=>{r>(i.rms[n]||0)&&(n=o)}),t.show(e?e.worst:n);let s=go(i,t.row);t.pick(e?.markers.length?e.markers:s>=0?[i.markers[s]]:[])}function gb(i,t){let e=Fe("groups"),n=Fe("plots"),s=u=>{for(let h of e.children)h.setAttribute("aria-pressed",String(h.value===u.name));t.clear(n);for(let h of u.columns)r(i.column[h])},r=u=>t.add(n,[Ua(u)],u.name,u.meaning);for(let u of i.groups){let h=document.createElement("button");h.type="button",h.value=h.textContent=u.name,h.addEventListener("click",()=>s(u)),e.append(h)}let o={name:"all",columns:i.columns.map(u=>u.name)},a=document.createElement("button");a.type="button",a.value=a.textContent="all",a.addEventListener("click",()=>s(o)),e.append(a);let l=i.groups.find(u=>u.columns.some(h=>i.column[h].unit==="deg"&&i.column[h].side==="right")),c,f=l??i.groups[0]??o;s(f),addEventListener("beforeprint",()=>{c=[...e.children].find(u=>u.getAttribute("aria-pressed")==="true")?.value,t.clear(n),o.columns.forEach(u=>r(i.column[u])),t.buildForPaper()}),addEventListener("afterprint",()=>t.live.forEach(u=>u.resize())),addEventListener("afterprint",()=>s([...i.groups,o].find(u=>u.name===c)??f))}function _b(){let i=[];addEventListener("beforeprint",()=>{i=[...document.querySelectorAll("details:not([open])")],i.forEach(t=>t.open=!0)}),addEventListener("afterprint",()=>i.forEach(t=>t.open=!1))}function xb(i,t){let e=Fe("side-plots");for(let[n,s]of i.pairs){let r=[Ua(i.column[n]),Ua(i.column[s],{dashed:!0})];t.add(e,r,n.replace(/_right(?=_|$)/,""),i.column[n].meaning)}}function yb(i,t){let e=Fe("slider");e.max=i.rows-1,e.addEventListener("input",()=>t.show(Number(e.value))),Fe("play").addEventListener("click",()=>t.toggle()),Fe("speed").addEventListener("change",n=>t.speed=Number(n.target.value)),Fe("nearer").addEventListener("click",()=>t.zoom(.5)),Fe("wider").addEventListener("click",()=>t.zoom(2)),Fe("whole").addEventListener("click",()=>t.stretchAround(i.rows)),t.on("playing",()=>{Fe("play").textContent=t.playing?"Pause":"Play"}),t.on("row",()=>{let{row:n}=t;e.value=n;let s=go(i,n),r=`${i.time[n].toFixed(2)} s`;Fe("now-time").textContent=r,Fe("now-frame").textContent=`frame ${i.frame[n]}`,Fe("now-rms").textContent=`RMS ${_o(i.rms[n])}`,Fe("now-worst").textContent=s<0?"no marker used":`worst ${i.markers[s]} ${_o(i.arrays.error[s][n])}`,e.setAttribute("aria-valuetext",`${r}, frame ${i.frame[n]}`)}),vb(i)}function vb(i){let t=Fe("marks");for(let e of i.findings)for(let n of e.places){let s=document.createElement("span");s.className=e.level;let r=Math.max(i.rows-1,1);s.style.left=`${100*n.first/r}%`,s.style.width=`${100*(n.last-n.first)/r}%`,t.append(s)}}function Sb(i,t){for(let e of document.querySelectorAll("button[data-finding]"))e.addEventListener("click",()=>{let n=i.findings[e.dataset.finding].places[e.dataset.place];t.show(n.worst),n.markers.length&&t.pick(n.markers),Fe("player").scrollIntoView({behavior:"smooth",block:"nearest"})})}function Mb(i,t){let e=i.findings.flatMap(r=>r.places),n=0,s={" ":()=>t.toggle(),ArrowLeft:r=>t.show(t.row-(r.shiftKey?10:1)),ArrowRight:r=>t.show(t.row+(r.shiftKey?10:1)),Home:()=>t.show(0),End:()=>t.show(i.rows-1),"+":()=>t.zoom(.5),"-":()=>t.zoom(2),0:()=>t.stretchAround(i.rows),n:()=>{if(!e.length)return;let r=e[n++%e.length];t.show(r.worst),r.markers.length&&t.pick(r.markers)}};addEventListener("keydown",r=>{if(r.ctrlKey||r.metaKey||r.altKey)return;let o=r.target.closest("select, textarea, input:not([type=range]):not([type=checkbox])"),a=r.target.closest("button, summary, a, input[type=checkbox]")&&r.key===" ";o||a||!s[r.key]||(r.preventDefault(),s[r.key](r))})}function bb(){document.body.classList.add("no-webgl");let i=document.querySelector(".stills figure");i&&Fe("player").append(i.cloneNode(!0))}function wb(i,t){let e=new Lc(i,t,Fe("player"));for(let n of document.querySelectorAll("input[data-layer]"))n.addEventListener("change",()=>e.set(n.dataset.layer,n.checked)),e.set(n.dataset.layer,n.checked);for(let n of document.querySelectorAll("button[data-view]"))n.addEventListener("click",()=>e.look(n.dataset.view));Fe("lengthen").addEventListener("change",n=>e.lengthen(Number(n.target.value))),Fe("follow").addEventListener("change",n=>e.follow=n.target.checked)}pb().catch(i=>{document.body.classList.add("broken"),Fe("broken").textContent=`This browser could not unpack the numbers (${i.message}). The words, tables and pictures below stand.`});})();
