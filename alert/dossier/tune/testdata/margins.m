% Margins and closed-loop poles of PI and PID loops from Octave's control
% package, the dead time as a Pade form of order 10:
%   octave --no-gui -q margins.m > octave.csv
pkg load control
s = tf('s');
c = {"B-pi",  1, [10],    2, 0, 2.0, 14, 0
     "B-pid", 1, [10],    2, 0, 3.0, 10, 0.8
     "F-pid", 1, [10 4],  2, 0, 3.0, 14, 2.5
     "E-pi",  2, [60],   12, 0, 1.6, 45, 0
     "H-pi",  0.05, [],   4, 1, 2.0, 40, 0
     "J-pi",  0.02, [5],  2, 1, 6.0, 60, 0
     "J-pid", 0.02, [5],  2, 1, 9.0, 50, 4};
printf("name,gain,lags,theta,integrating,kc,ti,td,gm,pm_deg,ms\n");
for i = 1:rows(c)
  g = tf(c{i,2}, 1);
  for l = c{i,3} g = g/(l*s+1); end
  if c{i,5} g = g/s; end
  [np, dp] = padecoef(c{i,4}, 10);
  kc = c{i,6}; ti = c{i,7}; td = c{i,8};
  k = kc*(1 + 1/(ti*s) + td*s/(td/10*s+1));
  L = minreal(k*g)*tf(np, dp);
  [gm, pm] = margin(L);
  w = logspace(-4, 1, 20001);
  ms = max(squeeze(bode(feedback(tf(1), L), w)));
  printf("%s,%g,%s,%g,%d,%g,%g,%g,%.6g,%.6g,%.6g\n", c{i,1}, c{i,2}, strrep(num2str(c{i,3}), "  ", " "), c{i,4}, c{i,5}, kc, ti, td, gm, pm, ms);
end
